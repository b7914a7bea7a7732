"""Small MR files for the tests of this room: classic images, enhanced objects and mosaics of an invented scanner."""

import struct
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from pydicom.dataset import Dataset, FileMetaDataset
from pydicom.sequence import Sequence
from pydicom.uid import EnhancedMRImageStorage, ExplicitVRBigEndian, ExplicitVRLittleEndian, MRImageStorage

ROOT = "1.2.826.0.1.3680043.8.498"
STUDY = f"{ROOT}.1"


def pattern(shape=(24, 20), seed=0, high=4096):
    """Pixels that no transposition, flip or shift leaves as they are."""
    return np.random.default_rng(seed).integers(0, high, shape, dtype=np.uint16)


def put_pixels(dataset, pixels):
    """Store unsigned or signed integers as they are."""
    dataset.SamplesPerPixel, dataset.PhotometricInterpretation = 1, "MONOCHROME2"
    dataset.Rows, dataset.Columns = pixels.shape[-2:]
    bits = pixels.dtype.itemsize * 8
    dataset.BitsAllocated, dataset.BitsStored, dataset.HighBit = bits, bits, bits - 1
    dataset.PixelRepresentation = int(pixels.dtype.kind == "i")
    dataset.PixelData = pixels.astype(pixels.dtype.newbyteorder("<")).tobytes()
    dataset["PixelData"].VR = "OB" if bits == 8 else "OW"


def header(number=1, series=1, sop_class=MRImageStorage):
    dataset = Dataset()
    dataset.file_meta = FileMetaDataset()
    dataset.file_meta.TransferSyntaxUID = ExplicitVRLittleEndian
    dataset.file_meta.MediaStorageSOPClassUID = dataset.SOPClassUID = sop_class
    dataset.SOPInstanceUID = dataset.file_meta.MediaStorageSOPInstanceUID = f"{STUDY}.{series}.{number}"
    dataset.StudyInstanceUID, dataset.SeriesInstanceUID = STUDY, f"{STUDY}.{series}"
    dataset.Modality, dataset.Manufacturer, dataset.ManufacturerModelName = "MR", "Invented", "Model 7"
    dataset.StationName, dataset.DeviceSerialNumber, dataset.SoftwareVersions = "NORTH3T", "40071", "1"
    dataset.PatientName, dataset.PatientID, dataset.PatientBirthDate, dataset.PatientSex = "QA^Phantom", "QA-1", "", "O"
    dataset.ImageType = ["ORIGINAL", "PRIMARY", "M", "ND"]
    dataset.StudyDate = dataset.SeriesDate = dataset.AcquisitionDate = "20261123"
    dataset.StudyTime, dataset.SeriesTime = "074000", f"0741{series:02d}"
    dataset.AcquisitionTime = f"0742{series:02d}.500000"
    dataset.SeriesDescription, dataset.ProtocolName = "QA sphere", "QA_SE"
    dataset.SeriesNumber, dataset.AcquisitionNumber, dataset.InstanceNumber = series, 1, number
    dataset.MagneticFieldStrength = 3
    return dataset


def mr_image(number=1, series=1, position=(-10.0, -12.0, 0.0), pixels=None, **values):
    """A classic MR image; `values` are set last, None deletes."""
    dataset = header(number, series)
    dataset.ScanningSequence, dataset.SequenceVariant, dataset.MRAcquisitionType = "SE", "NONE", "2D"
    dataset.SliceThickness, dataset.SpacingBetweenSlices, dataset.RepetitionTime, dataset.EchoTime = 5, 10, 500, 20
    dataset.FlipAngle, dataset.NumberOfAverages, dataset.ImagingFrequency, dataset.PixelBandwidth = 90, 1, 127.732, 150
    dataset.EchoNumbers, dataset.ReceiveCoilName, dataset.InPlanePhaseEncodingDirection = 1, "HEAD", "COL"
    dataset.ImagePositionPatient = list(position)
    dataset.ImageOrientationPatient = [1, 0, 0, 0, 1, 0]
    dataset.PixelSpacing = [1.25, 1.0]
    put_pixels(dataset, pattern(seed=100 * series + number) if pixels is None else pixels)
    for name, value in values.items():
        if value is None:
            del dataset[name]
        else:
            setattr(dataset, name, value)
    return dataset


def item(**values):
    dataset = Dataset()
    for name, value in values.items():
        setattr(dataset, name, value)
    return dataset


def enhanced_object(positions, pixels, *, number=1, series=1, temporal=None, echoes=None, components=None):
    """An Enhanced MR object with one frame a position."""
    dataset = header(number, series, EnhancedMRImageStorage)
    del dataset.AcquisitionDate, dataset.AcquisitionTime
    dataset.AcquisitionDateTime = f"2026112307420{series}.5"
    dataset.ImageType = ["ORIGINAL", "PRIMARY", "VOLUME", "NONE"]
    dataset.NumberOfFrames = len(positions)
    dataset.EchoPulseSequence, dataset.PulseSequenceName = "SPIN", "se"
    shared = Dataset()
    shared.MRTimingAndRelatedParametersSequence = Sequence([item(RepetitionTime=500, FlipAngle=90)])
    shared.MRImagingModifierSequence = Sequence([item(PixelBandwidth=150, TransmitterFrequency=127.732)])
    shared.MRReceiveCoilSequence = Sequence([item(ReceiveCoilName="HEAD")])
    shared.MRFOVGeometrySequence = Sequence([item(InPlanePhaseEncodingDirection="COLUMN")])
    shared.MRModifierSequence = Sequence([item(ParallelAcquisition="NO")])
    shared.MRAveragesSequence = Sequence([item(NumberOfAverages=1)])
    shared.PlaneOrientationSequence = Sequence([item(ImageOrientationPatient=[1, 0, 0, 0, 1, 0])])
    shared.PixelMeasuresSequence = Sequence([item(SliceThickness=5, SpacingBetweenSlices=10, PixelSpacing=[1.25, 1.0])])
    dataset.SharedFunctionalGroupsSequence = Sequence([shared])
    groups = []
    for frame, position in enumerate(positions):
        group = Dataset()
        group.PlanePositionSequence = Sequence([item(ImagePositionPatient=list(position))])
        group.MREchoSequence = Sequence([item(EffectiveEchoTime=echoes[frame] if echoes else 20.0)])
        content = item(FrameAcquisitionDateTime=f"2026112307420{series}.{frame:03d}", FrameAcquisitionNumber=1)
        if temporal:
            content.TemporalPositionIndex = temporal[frame]
        group.FrameContentSequence = Sequence([content])
        component = components[frame] if components else "MAGNITUDE"
        group.MRImageFrameTypeSequence = Sequence(
            [item(FrameType=["ORIGINAL", "PRIMARY", "VOLUME", "NONE"], ComplexImageComponent=component)]
        )
        group.PixelValueTransformationSequence = Sequence([item(RescaleSlope=1 + frame, RescaleIntercept=0, RescaleType="US")])
        groups.append(group)
    dataset.PerFrameFunctionalGroupsSequence = Sequence(groups)
    put_pixels(dataset, pixels)
    return dataset


def text_header(**fields):
    """A Siemens text header ("SV10") with the given fields, each a list of texts."""
    content = b"SV10\4\3\2\1" + struct.pack("<II", len(fields), 77)
    for name, values in fields.items():
        content += struct.pack("<64si4siii", name.encode(), 1, b"DS\0\0", 3, len(values), 77)
        for value in values:
            raw = value.encode() + b"\0"
            content += struct.pack("<4i", len(raw), len(raw), 77, len(raw)) + raw + b"\0" * (-len(raw) % 4)
    return content


def mosaic_image(tiles, *, normal=(0.0, 0.0, 1.0), corner=(-10.0, -12.0, -20.0), number=1, series=1, count_in="tag"):
    """Tiles, (S, R, C), in one image; `corner` is the first tile's; `count_in` is where the number of tiles stands."""
    slices, rows, columns = tiles.shape
    side = int(np.ceil(np.sqrt(slices)))
    image = np.zeros((side * rows, side * columns), dtype=tiles.dtype)
    for index, tile in enumerate(tiles):
        row, column = divmod(index, side)
        image[row * rows : (row + 1) * rows, column * columns : (column + 1) * columns] = tile
    dataset = mr_image(number, series, pixels=image, Manufacturer="SIEMENS", ScanningSequence="EP")
    dataset.ImageType = ["ORIGINAL", "PRIMARY", "M", "ND", "MOSAIC"]
    x_mm, y_mm = (side - 1) * columns / 2 * 1.0, (side - 1) * rows / 2 * 1.25
    dataset.ImagePositionPatient = [corner[0] - x_mm, corner[1] - y_mm, corner[2]]
    block = dataset.private_block(0x0019, "SIEMENS MR HEADER", create=True)
    fields = {"SliceNormalVector": [f"{value:.8f}" for value in normal], "PhaseEncodingDirectionPositive": ["1"]}
    if count_in == "tag":
        block.add_new(0x0A, "US", slices)
    elif count_in == "text":
        fields["NumberOfImagesInMosaic"] = [str(slices)]
    dataset.private_block(0x0029, "SIEMENS CSA HEADER", create=True).add_new(0x10, "OB", text_header(**fields))
    return dataset


def save(dataset, path, syntax=None):
    """Write a file; in big endian the bytes of pixels are turned round on the way."""
    path.parent.mkdir(parents=True, exist_ok=True)
    if syntax is not None:
        dataset.file_meta.TransferSyntaxUID = syntax
    if syntax == ExplicitVRBigEndian and dataset.BitsAllocated > 8:
        dataset.PixelData = np.frombuffer(dataset.PixelData, f"<u{dataset.BitsAllocated // 8}").byteswap().tobytes()
    dataset.save_as(path, enforce_file_format=True)
    return path


@pytest.fixture
def make():
    """The makers of data sets, and `save`."""
    return SimpleNamespace(
        image=mr_image,
        enhanced=enhanced_object,
        mosaic=mosaic_image,
        pattern=pattern,
        put_pixels=put_pixels,
        save=save,
        item=item,
    )


@pytest.fixture
def write_series(tmp_path) -> Callable[..., Path]:
    """Write a classic series, `count` slices `step` mm apart, in a folder of its own; give that folder."""

    def write(count=5, series=1, step=10.0, folder=None, **values):
        folder = folder or tmp_path / f"s{series}"
        for number in range(1, count + 1):
            position = (-10.0, -12.0, -20.0 + step * (number - 1))
            save(mr_image(number, series, position, **values), folder / f"{number:03d}.dcm")
        return folder

    return write
