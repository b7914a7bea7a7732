"""What all cases say of each quantity: bias, 95 % point, coverage, each with its bar."""

import math
from collections import defaultdict
from collections.abc import Sequence

import numpy as np

from qa.commission.bars import BAR_CASES, COVERAGE, COVERAGE_CASES, NORMAL_95, ROD_CENTRES, Row, rows
from qa.geometry import Floats
from qa.report.commission_content import Case, Figure, Missing, Tally

__all__ = ["coverage_interval", "tally_cases"]

_SHARE = 0.95


def tally_cases(cases: Sequence[Case]) -> tuple[Tally, ...]:
    """Add up the cases of one phantom.

    Parameters
    ----------
    cases : sequence of Case
        In any order.

    Returns
    -------
    tuple of Tally
        For every row of the table that some case falls in, in the table's order.
    """
    figures: dict[str, list[tuple[Case, Figure]]] = defaultdict(list)
    missing: dict[str, list[tuple[Case, Missing]]] = defaultdict(list)
    for case in sorted(cases, key=lambda c: c.seed):
        for figure in case.figures:
            figures[figure.row].append((case, figure))
        for one in case.missing:
            missing[one.row].append((case, one))
    return tuple(_tally(row, figures[row.key], missing[row.key]) for row in rows() if figures[row.key] or missing[row.key])


def _tally(row: Row, found: list[tuple[Case, Figure]], missing: list[tuple[Case, Missing]]) -> Tally:
    if row.quantity == ROD_CENTRES:
        errors, share_errors, bias, u_bias = _rods([case for case, _ in found])
        inside = share_errors <= (row.within or math.inf)
    else:
        errors = share_errors = np.array([f.error for _, f in found])
        bias, u_bias = _mean(errors)
        inside = np.array([f.allowed is None or abs(f.error) <= f.allowed for _, f in found])
    # A case that was not measured lies outside: a routine that gives up on the hard cases gains nothing.
    weight = len(share_errors) / len(found) if found else 1.0
    whole = len(share_errors) + round(weight * len(missing))
    point = _point(np.abs(share_errors), whole)
    share = float(np.sum(inside)) / whole if whole else None
    has_bar = row.within is not None or row.limits is not None
    coverage, interval, coverage_met = _coverage(row, [f for _, f in found])
    limits = [f.limit for _, f in found if f.limit is not None]
    allowed = [f.allowed for _, f in found if f.allowed is not None]
    worst = max(found, key=_badness, default=None)
    return Tally(
        row=row.key,
        quantity=row.quantity,
        title=row.title,
        part=row.part,
        unit=row.unit,
        remark=row.remark,
        cases=len(found) + len(missing),
        measured=len(found),
        bias=bias,
        u_bias=u_bias,
        bias_bar=row.bias,
        point=point,
        bar_words=_bar_words(row),
        allowed=(min(allowed), max(allowed)) if allowed else None,
        share=share if has_bar else None,
        limit=NORMAL_95 * float(np.median(limits)) if limits else None,
        coverage=coverage,
        coverage_range=interval,
        bias_met=None if row.bias is None else _bias_met(bias, u_bias, row.bias, len(found)),
        point_met=_point_met(int(np.sum(inside)), whole, len(found) + len(missing)) if has_bar else None,
        coverage_met=coverage_met,
        worst=None if worst is None else worst[1],
        worst_seed=None if worst is None else worst[0].seed,
        missing=_reasons(missing),
    )


def _mean(errors: Floats) -> tuple[float | None, float | None]:
    if not errors.size:
        return None, None
    spread = float(errors.std(ddof=1)) / math.sqrt(errors.size) if errors.size > 1 else None
    return float(errors.mean()), spread


def _bias_met(bias: float | None, u_bias: float | None, bar: float, cases: int) -> bool:
    if bias is None:
        return False
    chance = 0.0 if cases >= BAR_CASES else math.inf if u_bias is None else 2 * u_bias
    return abs(bias) <= bar + chance


def _point_met(inside: int, whole: int, cases: int) -> bool:
    return (inside / whole if cases >= BAR_CASES else coverage_interval(inside, whole)[1]) >= _SHARE


def _rods(cases: list[Case]) -> tuple[Floats, Floats, float | None, float | None]:
    """Errors of all rods of all cases as distances, and the bias: the largest mean error vector of any one rod.

    The rigid fit takes the mean over a case's rods out, so a bias is sought at each place of the lattice.
    """
    by_rod: dict[tuple[int, int], list[tuple[float, float]]] = defaultdict(list)
    for case in cases:
        for i, j, x, y in case.rods:
            by_rod[i, j].append((x, y))
    vectors = {rod: np.array(errors) for rod, errors in by_rod.items()}
    distances = np.concatenate([np.hypot(*v.T) for v in vectors.values()]) if vectors else np.zeros(0)
    if not vectors:
        return distances, distances, None, None
    worst = max(vectors.values(), key=lambda v: float(np.hypot(*v.mean(axis=0))))
    spread = float(np.hypot(*worst.std(axis=0, ddof=1))) / math.sqrt(2 * len(worst)) if len(worst) > 1 else None
    return distances, distances, float(np.hypot(*worst.mean(axis=0))), spread


def _point(distances: Floats, whole: int) -> float | None:
    """Return the smallest error within which 95 % of the cases lie."""
    rank = math.ceil(_SHARE * whole - 1e-9)
    return float(np.sort(distances)[rank - 1]) if 0 < rank <= distances.size else None


def _coverage(row: Row, figures: list[Figure]) -> tuple[float | None, tuple[float, float] | None, bool | None]:
    if not figures or not row.judged or row.quantity == ROD_CENTRES:
        return None, None, None
    held = sum(f.covered for f in figures)
    coverage = held / len(figures)
    low, high = coverage_interval(held, len(figures))
    # The promise is one over 500 cases or more; fewer miss it only where chance cannot be the reason.
    settled = len(figures) >= COVERAGE_CASES
    met = COVERAGE[0] <= coverage <= COVERAGE[1] if settled else low <= COVERAGE[1] and high >= COVERAGE[0]
    return coverage, (low, high), met


def coverage_interval(held: int, cases: int) -> tuple[float, float]:
    """Exact two-sided 95 % confidence interval of a share (Clopper and Pearson 1934)."""
    from scipy.stats import beta

    low = float(beta.ppf(0.025, held, cases - held + 1)) if held else 0.0
    high = float(beta.ppf(0.975, held + 1, cases - held)) if held < cases else 1.0
    return low, high


def _badness(pair: tuple[Case, Figure]) -> float:
    figure = pair[1]
    return abs(figure.error) / figure.allowed if figure.allowed else abs(figure.error)


def _bar_words(row: Row) -> str:
    fixed = "" if row.within is None else f"{row.within:g} {row.unit if row.unit != '1' else ''}".strip()
    return " or ".join(part for part in (fixed, row.limit_words) if part)


def _reasons(missing: list[tuple[Case, Missing]]) -> tuple[tuple[str, int, int], ...]:
    seeds: dict[str, list[int]] = defaultdict(list)
    for case, one in missing:
        seeds[one.reason].append(case.seed)
    return tuple((reason, len(held), held[0]) for reason, held in sorted(seeds.items(), key=lambda item: -len(item[1])))
