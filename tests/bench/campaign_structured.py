"""The accuracy table of the structured phantoms: many random digital scans, measured, against their true values.

    python tests/bench/campaign_structured.py --cases 500 --workers 2
    python tests/bench/campaign_structured.py --lattices 10000

Prints, for each quantity: cases, bias with its standard error, the error that 95 % of the cases stay within, the bar, and how
often the expanded interval (k = 2) holds the truth. For slice thickness the Cramer-Rao limit of each case stands beside it:
the Fisher information of noncentral chi magnitudes (as many channels as the scan has) about middle, length and height of each
bar, with level and noise known, in the pixels of the slots. No unbiased routine can do better on these pixels.
"""

import argparse
import math
from collections import defaultdict

import numpy as np
from joblib import Parallel, delayed
from scipy import stats

from qa.locate import locate
from qa.locate.match import match_lattice
from qa.locate.view import SliceView
from qa.measure import lattice, position, thickness
from qa.phantoms import Lattice, Ramps, Rods, load_phantom
from qa.records import Measurement, NotLocated, NotMeasured, Pose
from qa.simulate import Setup, Truth, random_setup, simulate, true_values

BARS = {
    "slice_thickness": "bias 0.05, 95 % 0.15 mm or 1.3 x Cramer-Rao",
    "slice_position": "bias 0.05, 95 % 0.20 mm",
    "slice_position_end": "bias 0.05, 95 % 0.20 mm",
    "rod centres (pixels)": "bias 0.02, 95 % 0.10 pixel",
    "crossings (pixels)": "bias 0.02, 95 % 0.10 pixel",
}


def information(channels: int) -> tuple[np.ndarray, np.ndarray]:
    """Fisher information about the signal, in 1 / sigma^2, against signal over sigma; magnitudes are noncentral chi."""
    signal = np.concatenate([np.linspace(0.02, 4, 60), np.geomspace(4.2, 60, 30)])
    found = []
    for s in signal:
        low, high = stats.ncx2.ppf([1e-9, 1 - 1e-9], 2 * channels, s * s)
        power = np.linspace(max(low, 1e-9), high, 4001)
        step = 1e-3
        up, down = (stats.ncx2.pdf(power, 2 * channels, (s + d) ** 2) for d in (step, -step))
        density = np.maximum(stats.ncx2.pdf(power, 2 * channels, s * s), 1e-300)
        found.append(np.trapezoid(((up - down) / (2 * step)) ** 2 / density, power))
    return signal, np.array(found)


def cramer_rao(setup: Setup, section: Ramps, bars: list[float], table: tuple[np.ndarray, np.ndarray]) -> float:
    """Least standard deviation (mm) of 2AB/(A+B) times slope for this scan; `table` is `information` for its channels."""
    signal, info = table
    pixels_per_mm2 = 1 / (setup.pixel_mm[0] * setup.pixel_mm[1])
    thick, slope = setup.thickness_mm, abs(section.slots[0].slope)
    variance = []
    for slot, length in zip(section.slots, bars, strict=True):
        per_mm = length / thick
        foot = slot.thickness_mm * per_mm
        x = np.arange(-(length + foot), length + foot, 0.05)
        height = slot.thickness_mm / thick

        def shape(q: np.ndarray, x: np.ndarray = x, foot: float = foot) -> np.ndarray:
            rise = [np.clip((x - q[0] + side * q[1] / 2) / foot + 0.5, 0, 1) for side in (1, -1)]
            return q[2] * (rise[0] - rise[1])

        at = np.array([0.0, length, height])
        slopes = np.stack([(shape(at + d) - shape(at - d)) / (2 * d.sum()) for d in np.eye(3) * np.array([0.01, 0.01, 1e-4])])
        weight = np.interp(shape(at) * setup.snr, signal, info) * setup.snr**2
        matrix = (slopes * weight) @ slopes.T * 0.05 * slot.height_mm * pixels_per_mm2
        variance.append(np.linalg.inv(matrix)[1, 1])
    a, b = bars
    return 2 * slope * math.hypot(b * b * math.sqrt(variance[0]), a * a * math.sqrt(variance[1])) / (a + b) ** 2


def inside_block(setup: Setup) -> bool:
    """Tell whether both bars lie inside the ramp block, feet and all."""
    section = next(s for s in setup.phantom.sections if isinstance(s, Ramps))
    pose = Pose(np.asarray(setup.centre_patient), setup.orientation, 0.0, 0.0, (0.0, 0.0, 0.0), 0.0, 0.0, ())
    view = SliceView.of(setup.planes[0], pose)
    ends = []
    for slot in section.slots:
        climb = slot.slope - view.lean[0]
        middle = (float(view.height(0.0, slot.centre_y_mm)) - section.z_mm + slot.slope * slot.crossing_x_mm) / climb
        half = (setup.thickness_mm + slot.thickness_mm) / 2 / abs(climb)
        ends += [abs(middle - section.block_centre_mm[0]) + half]
    return max(ends) < section.block_size_mm[0] / 2


def draw(kind: str, number: int) -> Setup:
    """A random scan: of the sectioned phantom (for thickness, with bars inside the block), or of a bent lattice of rods."""
    rng = np.random.default_rng([20, ord(kind[0]), number])
    if kind == "rods":
        bend = {name: float(rng.uniform(-2, 2)) for name in ("nonlinearity_x_mm", "nonlinearity_y_mm")}
        scale = {name: float(rng.uniform(-1.5, 1.5)) for name in ("scale_x_percent", "scale_y_percent")}
        return random_setup(rng, load_phantom("lattice-200"), repeats=1, **bend, **scale)
    while True:
        setup = random_setup(rng, load_phantom("sectioned-190"), repeats=1)
        if kind == "sectioned":
            return setup
        normal = np.cross(setup.row_direction, setup.column_direction)
        centre = np.asarray(setup.centre_patient)
        centre = centre + (rng.uniform(-2.5, 2.5) - centre @ normal) * normal
        setup = setup.but(centre_patient=tuple(float(v) for v in centre))
        if inside_block(setup):
            return setup


ROUTINES = {
    "thickness": (thickness.slice_thickness,),
    "sectioned": (position.slice_position, lattice.lattice),
    "rods": (lattice.lattice,),
}
Row = tuple[str, float, float, float]


def case(kind: str, number: int, tables: dict[int, tuple[np.ndarray, np.ndarray]]) -> list[Row]:
    """One scan: (quantity, error, standard uncertainty, limit) for each figure; limit is Cramer-Rao's, or 0."""
    setup = draw(kind, number)
    scan, truth = simulate(setup), true_values(setup)
    pose = locate(scan, setup.phantom)
    if isinstance(pose, NotLocated):
        return [(f"not located: {pose.reason}", math.nan, math.nan, 0.0)]
    results: list[Row] = []
    for m in (m for routine in ROUTINES[kind] for m in routine(scan, pose, setup.phantom)):
        if isinstance(m, NotMeasured):
            results.append((f"{m.quantity} not measured: {m.reason}", math.nan, math.nan, 0.0))
        elif m.quantity in truth:
            told = truth[m.quantity]
            limit = 0.0
            if m.quantity == "slice_thickness":
                limit = cramer_rao(setup, setup.phantom.sections[0], told.details["bars_mm"], tables[setup.channels])
            results.append((m.quantity, m.value - told.value, m.standard_uncertainty, limit))
            if m.quantity == "lattice_rms":
                results += marks(setup, m, told, number)
    return results


def marks(setup: Setup, m: Measurement, told: Truth, number: int) -> list[Row]:
    """Errors of all marks along x and y in pixels; a mark more than 2 mm off is called mistaken."""
    true = {(r["i"], r["j"]): r["place_mm_in_image"] for r in told.details["rods"]}
    name = "rod centres (pixels)" if isinstance(setup.phantom.sections[0], Rods) else "crossings (pixels)"
    results: list[Row] = []
    for region, rod in zip(m.regions, m.details["rods"], strict=True):
        off = np.subtract(region.points[0], setup.planes[0].middle_mm) - true[rod["i"], rod["j"]]
        if np.hypot(*off) > 2.0:
            results.append((f"MISTAKEN {name} in case {number}", math.nan, math.nan, 0.0))
        for along, pixel in zip(off, setup.pixel_mm[::-1], strict=True):
            results.append((name, float(along) / pixel, rod["u_mm"] / pixel, 0.0))
    return results


def table(results: list[Row]) -> None:
    """Print one line a quantity."""
    groups = defaultdict(list)
    for name, *figures in results:
        groups[name].append(figures)
    for name, rows in sorted(groups.items(), key=lambda item: item[0]):
        error, u, limit = np.array(rows).T
        if np.isnan(error).all():
            print(f"{len(rows):6d}  {name}")
            continue
        n = len(error)
        cover = float(np.mean(np.abs(error) < 2 * u))
        print(
            f"{n:6d}  {name:22s} bias {error.mean():+.4f} +- {error.std() / math.sqrt(n):.4f}   "
            f"95 % {np.percentile(np.abs(error), 95):.4f}   worst {np.abs(error).max():.3f}   "
            f"k=2 holds {100 * cover:.1f} +- {100 * math.sqrt(cover * (1 - cover) / n):.1f} %   {BARS.get(name, '')}"
        )
        if limit.any():
            bar = np.maximum(0.15, 1.3 * 1.96 * limit)
            print(
                f"        error over its own bar (0.15 mm, or 1.3 x Cramer-Rao at 95 % where that is more): "
                f"95 % {np.percentile(np.abs(error) / bar, 95):.2f}; "
                f"median Cramer-Rao limit {1.96 * np.median(limit):.3f} mm, largest {1.96 * limit.max():.3f} mm, at 95 %"
            )


def lattices(count: int) -> None:
    """Match random bent lattices and print how many marks were mistaken."""
    mistaken = unmatched = undecided = total = 0
    for number in range(count):
        rng = np.random.default_rng([21, number])
        phantom = load_phantom(("lattice-200", "sectioned-190")[number % 2])
        section = next(s for s in phantom.sections if isinstance(s, Rods | Lattice))
        listed = section.rods_mm() if isinstance(section, Rods) else section.crossings_mm()
        index, true = np.array([m[:2] for m in listed]), np.array([m[2:] for m in listed])
        turn = rng.uniform(-44, 44)
        c, s = math.cos(math.radians(turn)), math.sin(math.radians(turn))
        places = true @ np.array([[c, s], [-s, c]])
        x, y = places.T / 100
        terms = np.array([x**a * y**b for a in range(4) for b in range(4 - a)]).T
        bend = terms @ rng.normal(size=(terms.shape[1], 2))
        places = places + bend / np.hypot(*bend.T).max() * rng.uniform(0, 6) + rng.normal(scale=0.1, size=places.shape)
        kept = np.flatnonzero(rng.uniform(size=len(places)) > rng.choice([0.0, 0.05]))
        false = rng.uniform(-100, 100, size=(rng.integers(0, 3), 2))
        seen = np.concatenate([places[kept], false])
        order = rng.permutation(len(seen))
        source = np.append(kept, np.full(len(false), -1))[order]
        matched = match_lattice(seen[order], index, section.pitch_mm, rng.normal(size=2), turn + rng.uniform(-3, 3))
        if isinstance(matched, str):
            undecided += 1
            continue
        taken = matched.mark >= 0
        truth = source[matched.mark[taken]]
        mistaken += int(np.count_nonzero((truth != np.flatnonzero(taken)) & (truth >= 0)))
        unmatched += len(kept) - int(np.count_nonzero(truth >= 0))
        total += len(kept)
    print(
        f"{count} lattices, {total} marks: {mistaken} mistaken, {unmatched} left unmatched, {undecided} lattices not decided"
    )


def main() -> None:
    """Read the arguments and print the tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--cases", type=int, default=0)
    parser.add_argument("--lattices", type=int, default=0)
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--kinds", nargs="*", default=["thickness", "sectioned", "rods"])
    arguments = parser.parse_args()
    tables = {n: information(n) for n in (1, 2, 4, 8, 16)} if arguments.cases else {}
    for kind in arguments.kinds if arguments.cases else ():
        done = Parallel(n_jobs=arguments.workers)(delayed(case)(kind, number, tables) for number in range(arguments.cases))
        print(f"{kind}: {arguments.cases} scans", flush=True)
        table([row for rows in done for row in rows])
    if arguments.lattices:
        lattices(arguments.lattices)


if __name__ == "__main__":
    main()
