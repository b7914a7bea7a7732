"""How long reading, locating and measuring a pair of 11-slice 256 x 256 series takes, against pydicom's read and decode."""

import argparse
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import pydicom

from qa.dicom import read
from qa.locate import locate
from qa.measure import ROUTINES, measure
from qa.phantoms import Phantom, load_phantom
from qa.simulate import default_setup, write_dicom


def best(work: Callable[[], object], rounds: int) -> float:
    """Shortest of several runs, in milliseconds."""
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return 1000 * min(times)


def bench(phantom: Phantom, rounds: int) -> None:
    """Print the figures for one phantom."""
    setup = default_setup(phantom, slices=11, matrix=(256, 256), pixel_mm=(1.0, 1.0), spacing_mm=10.0, channels=4)
    with tempfile.TemporaryDirectory() as folder:
        files = write_dicom(setup, Path(folder))
        plain = best(lambda: [pydicom.dcmread(path).pixel_array for path in files], rounds)
        reading = best(lambda: read(files), rounds)
        scan = read(files).acquisitions[0]
        pose = locate(scan, phantom)
        locating = best(lambda: locate(scan, phantom), rounds)
        measuring = best(lambda: measure(scan, pose, phantom), rounds)
        print(f"{phantom.name}: {len(files)} files of {scan.pixels.shape[1]} x {scan.pixels.shape[2]}")
        print(f"  pydicom read and decode {plain:7.1f} ms")
        print(f"  read                    {reading:7.1f} ms")
        print(f"  locate                  {locating:7.1f} ms")
        print(f"  measure                 {measuring:7.1f} ms")
        for routine in ROUTINES:
            print(
                f"    {routine.quantities[0]:20s}  {best(lambda r=routine: list(r.run(scan, pose, phantom)), rounds):7.1f} ms"
            )
        total = reading + locating + measuring
        print(f"  all                     {total:7.1f} ms, {total / plain:.1f} times pydicom (bar: 6)")


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=7)
    parser.add_argument("phantom", nargs="*", default=["sphere-170", "cylinder-200", "sectioned-190"])
    arguments = parser.parse_args()
    for name in arguments.phantom:
        bench(load_phantom(name), arguments.rounds)
