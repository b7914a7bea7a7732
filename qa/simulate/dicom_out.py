"""Digital scans as DICOM objects: MR Image Storage and Enhanced MR Image Storage (PS3.3, A.4 and A.36)."""

import math
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from qa.geometry import Plane
from qa.simulate.acquire import uid
from qa.simulate.encode import Scan
from qa.simulate.setup import Setup

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

__all__ = ["add_pixels", "decimals", "shared_dataset", "write_dicom"]

_MR_IMAGE = "1.2.840.10008.5.1.4.1.1.4"
_IMPLEMENTATION = "2.25.314159265358979323846264338327950288"


def write_dicom(setup: Setup, folder: Path, *, enhanced: bool = False) -> list[Path]:
    """Scan a digital phantom and write its files; the same seed writes the same bytes.

    Parameters
    ----------
    setup : Setup
        The scan.
    folder : pathlib.Path
        Where to; made when absent. Each repeat gets a folder of its own, `s0`, `s1`, ...
    enhanced : bool
        One multi-frame object a repeat instead of one file a slice.

    Returns
    -------
    list of pathlib.Path
        The files, in order of repeat and slice.
    """
    from qa.simulate.dicom_enhanced import enhanced_dataset

    written = []
    machine = Scan(setup)
    for repeat in range(setup.repeats):
        stack = machine.stack(repeat)
        place = Path(folder) / f"s{repeat}"
        place.mkdir(parents=True, exist_ok=True)
        if enhanced:
            path = place / "im0001.dcm"
            _save(enhanced_dataset(setup, repeat, stack), path)
            written.append(path)
            continue
        for index, plane in enumerate(setup.planes):
            path = place / f"im{index + 1:04d}.dcm"
            _save(_classic(setup, repeat, index, plane, stack[index]), path)
            written.append(path)
    return written


def shared_dataset(setup: Setup, repeat: int, sop_class: str, sop_instance: str) -> "Dataset":
    """Patient, study, series, equipment and frame of reference: what both kinds of object share."""
    from pydicom.dataset import Dataset

    began = setup.started(repeat)
    ds = Dataset()
    ds.SpecificCharacterSet = "ISO_IR 192"
    ds.SOPClassUID = sop_class
    ds.SOPInstanceUID = sop_instance
    ds.StudyDate = _date(setup.acquired_at)
    ds.StudyTime = _time(setup.acquired_at)
    ds.SeriesDate = ds.AcquisitionDate = ds.ContentDate = _date(began)
    ds.SeriesTime = ds.AcquisitionTime = ds.ContentTime = _time(began)
    ds.AccessionNumber = ""
    ds.Modality = "MR"
    ds.Manufacturer = setup.manufacturer
    ds.InstitutionName = setup.institution
    ds.ReferringPhysicianName = ""
    ds.StationName = setup.station
    ds.StudyDescription = setup.study_description
    ds.SeriesDescription = setup.description
    ds.ManufacturerModelName = setup.model
    ds.PatientName = "QA^Phantom"
    ds.PatientID = setup.patient_id or f"QA-{setup.phantom.name}"
    ds.PatientBirthDate = ""
    ds.PatientSex = "O"
    ds.DeviceSerialNumber = setup.serial
    ds.SoftwareVersions = setup.software
    ds.ProtocolName = setup.protocol
    ds.PatientPosition = "HFS"
    ds.StudyInstanceUID = uid(setup, "study")
    ds.SeriesInstanceUID = uid(setup, "series", repeat)
    ds.StudyID = "1"
    ds.SeriesNumber = repeat + 1
    ds.FrameOfReferenceUID = uid(setup, "frame of reference")
    ds.PositionReferenceIndicator = ""
    return ds


def add_pixels(ds: "Dataset", setup: Setup, pixels: NDArray[np.float32]) -> None:
    """Add rows, columns, bits and the pixels themselves as unsigned 16 bit."""
    ds.SamplesPerPixel = 1
    ds.PhotometricInterpretation = "MONOCHROME2"
    ds.Rows, ds.Columns = setup.matrix
    ds.BitsAllocated, ds.BitsStored, ds.HighBit, ds.PixelRepresentation = 16, 16, 15, 0
    ds.PixelData = pixels.astype("<u2").tobytes()


def decimals(values: Any) -> list[str]:  # noqa: ANN401 - any sequence of numbers
    """Format numbers as decimal strings of at most 16 characters."""
    from pydicom.valuerep import format_number_as_ds

    return [format_number_as_ds(0.0 if v == 0 else float(v)) for v in values]


def _classic(setup: Setup, repeat: int, index: int, plane: Plane, pixels: NDArray[np.float32]) -> "Dataset":
    ds = shared_dataset(setup, repeat, _MR_IMAGE, uid(setup, "image", repeat, index))
    ds.Laterality = ""
    ds.ImageType = ["ORIGINAL", "PRIMARY", "M", "NONE"]
    ds.ScanningSequence = "SE" if setup.sequence == "SE" else "GR"
    ds.SequenceVariant = "NONE" if setup.sequence == "SE" else "SP"
    ds.SequenceName = setup.sequence
    ds.ScanOptions = "PFP" if setup.partial_fourier < 1 else ""
    ds.MRAcquisitionType = "2D"
    ds.SliceThickness = decimals([setup.thickness_mm])[0]
    ds.RepetitionTime = decimals([setup.repetition_ms])[0]
    ds.EchoTime = decimals([setup.echo_ms])[0]
    ds.NumberOfAverages = setup.averages
    ds.ImagingFrequency = decimals([setup.frequency_MHz])[0]
    ds.ImagedNucleus = "1H"
    ds.EchoNumbers = 1
    ds.MagneticFieldStrength = decimals([setup.field_strength_T])[0]
    ds.SpacingBetweenSlices = decimals([setup.thickness_mm if setup.spacing_mm is None else setup.spacing_mm])[0]
    ds.EchoTrainLength = 1
    ds.PixelBandwidth = decimals([setup.bandwidth_hz_per_pixel])[0]
    ds.ReceiveCoilName = setup.receive_coil
    rows, columns = (math.ceil(n * setup.acquired_fraction) for n in setup.matrix)
    lines = setup.phase_encode == "column"
    ds.AcquisitionMatrix = [0, columns, rows, 0] if lines else [rows, 0, 0, columns]
    ds.InPlanePhaseEncodingDirection = "COL" if lines else "ROW"
    ds.FlipAngle = decimals([setup.flip_deg])[0]
    ds.AcquisitionNumber = 1
    ds.InstanceNumber = index + 1
    ds.ImagePositionPatient = decimals(plane.position_patient)
    ds.ImageOrientationPatient = decimals([*plane.row_direction, *plane.column_direction])
    ds.SliceLocation = decimals([plane.position_along_normal])[0]
    ds.PixelSpacing = decimals(setup.pixel_mm)
    ds.WindowCenter, ds.WindowWidth = decimals([setup.level / 2, setup.level])
    add_pixels(ds, setup, pixels)
    return ds


def _save(ds: "Dataset", path: Path) -> None:
    from pydicom import dcmwrite
    from pydicom.dataset import FileMetaDataset
    from pydicom.uid import UID, ExplicitVRLittleEndian

    meta = FileMetaDataset()
    meta.FileMetaInformationVersion = b"\x00\x01"
    meta.MediaStorageSOPClassUID = ds.SOPClassUID
    meta.MediaStorageSOPInstanceUID = ds.SOPInstanceUID
    meta.TransferSyntaxUID = ExplicitVRLittleEndian
    meta.ImplementationClassUID = UID(_IMPLEMENTATION)
    meta.ImplementationVersionName = "EVENFIELD"
    ds.file_meta = meta
    dcmwrite(path, ds, enforce_file_format=True)


def _date(at: datetime) -> str:
    return at.strftime("%Y%m%d")


def _time(at: datetime) -> str:
    return at.strftime("%H%M%S")
