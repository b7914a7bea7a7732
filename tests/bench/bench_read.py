"""How long reading a pair of 11-slice 256 x 256 series takes, against pydicom's plain read-and-decode of the same files."""

import argparse
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pydicom
from pydicom.dataset import Dataset, FileMetaDataset
from pydicom.uid import ExplicitVRLittleEndian, MRImageStorage, generate_uid

from qa.dicom import read

SLICES, SIDE = 11, 256


def write_pair(folder: Path) -> list[Path]:
    """Write two series of one study, noise in every pixel."""
    rng = np.random.default_rng(7)
    study, paths = generate_uid(), []
    for repeat in range(2):
        series = generate_uid()
        for number in range(SLICES):
            dataset = Dataset()
            dataset.file_meta = FileMetaDataset()
            dataset.file_meta.TransferSyntaxUID = ExplicitVRLittleEndian
            dataset.file_meta.MediaStorageSOPClassUID = dataset.SOPClassUID = MRImageStorage
            dataset.file_meta.MediaStorageSOPInstanceUID = dataset.SOPInstanceUID = generate_uid()
            dataset.StudyInstanceUID, dataset.SeriesInstanceUID = study, series
            dataset.Modality, dataset.Manufacturer, dataset.ManufacturerModelName = "MR", "Invented", "Model 7"
            dataset.StationName, dataset.DeviceSerialNumber, dataset.SoftwareVersions = "NORTH3T", "40071", "1"
            dataset.PatientName, dataset.PatientID, dataset.PatientBirthDate, dataset.PatientSex = (
                "QA^Phantom",
                "QA-1",
                "",
                "O",
            )
            dataset.ImageType = ["ORIGINAL", "PRIMARY", "M", "ND"]
            dataset.StudyDate = dataset.SeriesDate = dataset.AcquisitionDate = dataset.ContentDate = "20261123"
            dataset.StudyTime = dataset.SeriesTime = dataset.AcquisitionTime = dataset.ContentTime = f"0741{repeat:02d}"
            dataset.SeriesDescription, dataset.ProtocolName, dataset.ReceiveCoilName = "QA sphere", "QA_SE", "HEAD"
            dataset.ScanningSequence, dataset.SequenceVariant, dataset.MRAcquisitionType = "SE", "NONE", "2D"
            dataset.SliceThickness, dataset.SpacingBetweenSlices, dataset.RepetitionTime, dataset.EchoTime = 5, 10, 500, 20
            dataset.FlipAngle, dataset.NumberOfAverages, dataset.ImagingFrequency, dataset.PixelBandwidth = 90, 1, 127.732, 150
            dataset.MagneticFieldStrength, dataset.ImagedNucleus, dataset.EchoNumbers, dataset.EchoTrainLength = 3, "1H", 1, 1
            dataset.InPlanePhaseEncodingDirection, dataset.PatientPosition = "COL", "HFS"
            dataset.SeriesNumber, dataset.AcquisitionNumber, dataset.InstanceNumber = repeat + 1, 1, number + 1
            dataset.ImagePositionPatient = [-127.5, -127.5, -50 + 10 * number]
            dataset.ImageOrientationPatient = [1, 0, 0, 0, 1, 0]
            dataset.PixelSpacing = [1, 1]
            dataset.SamplesPerPixel, dataset.PhotometricInterpretation = 1, "MONOCHROME2"
            dataset.Rows = dataset.Columns = SIDE
            dataset.BitsAllocated, dataset.BitsStored, dataset.HighBit, dataset.PixelRepresentation = 16, 12, 11, 0
            dataset.PixelData = rng.integers(0, 4096, (SIDE, SIDE), dtype=np.uint16).tobytes()
            paths.append(folder / f"{repeat}-{number:02d}.dcm")
            dataset.save_as(paths[-1], enforce_file_format=True)
    return paths


def best_of(times: int, task: Callable[[], object]) -> float:
    """Shortest of several runs, in seconds: the one that the machine disturbed least."""
    best = float("inf")
    for _ in range(times):
        start = time.perf_counter()
        task()
        best = min(best, time.perf_counter() - start)
    return best


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--times", type=int, default=15, help="runs of each, of which the best counts")
    times = parser.parse_args().times
    with tempfile.TemporaryDirectory() as name:
        paths = write_pair(Path(name))
        plain = best_of(times, lambda: [pydicom.dcmread(path).pixel_array for path in paths])
        ours = best_of(times, lambda: read(name))
    print(f"pydicom reads and decodes {len(paths)} files in {plain * 1e3:.1f} ms")
    print(f"qa.dicom.read in {ours * 1e3:.1f} ms: {ours / plain:.2f} times")


if __name__ == "__main__":
    main()
