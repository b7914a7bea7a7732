"""How long it takes to measure a sectioned-190 series (11 slices, 256 x 256), against pydicom reading and decoding it."""

import argparse
import tempfile
from pathlib import Path
from time import process_time

import pydicom

from qa.dicom import read
from qa.locate import locate
from qa.locate.body import locate_body
from qa.measure import ROUTINES, measure
from qa.phantoms import load_phantom
from qa.simulate import default_setup, write_dicom


def best(work, rounds):
    """Shortest of several runs, in milliseconds of this process."""
    times = []
    for _ in range(rounds):
        start = process_time()
        work()
        times.append(process_time() - start)
    return 1000 * min(times)


def main():
    """Print the times and their ratios."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=15)
    rounds = parser.parse_args().rounds
    phantom = load_phantom("sectioned-190")
    setup = default_setup(phantom, repeats=1, rotation_deg=3.0, centre_patient=(4.0, -6.0, 0.5), tilt_x_deg=0.5, channels=4)
    with tempfile.TemporaryDirectory() as folder:
        files = write_dicom(setup, Path(folder))
        plain = best(lambda: [pydicom.dcmread(path).pixel_array for path in files], rounds)
        reading = best(lambda: read(files), rounds)
        scan = read(files).acquisitions[0]
    pose = locate(scan, phantom)
    body = best(lambda: locate_body(scan, phantom), rounds)
    locating = best(lambda: locate(scan, phantom), rounds)
    measuring = best(lambda: measure(scan, pose, phantom), rounds)
    print(f"{len(files)} files of {scan.pixels.shape[1]} x {scan.pixels.shape[2]}")
    print(f"pydicom read and decode  {plain:7.1f} ms")
    print(f"read                     {reading:7.1f} ms")
    print(f"locate                   {locating:7.1f} ms, of which the body {body:.1f} ms")
    print(f"measure                  {measuring:7.1f} ms")
    for routine in ROUTINES:
        print(f"  {routine.quantities[0]:22s} {best(lambda r=routine: list(r.run(scan, pose, phantom)), rounds):7.1f} ms")
    done = locating + measuring
    print(f"locate and measure       {done:7.1f} ms: {done / plain:.1f} times pydicom (bar: 8)")
    print(f"with reading             {done + reading:7.1f} ms: {(done + reading) / plain:.1f} times pydicom")


if __name__ == "__main__":
    main()
