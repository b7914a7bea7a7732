"""Planes and pixels against SimpleITK (ITK's own DICOM reader, on GDCM), and mosaics against GDCM's splitter.

SimpleITK reads every real folder but takes a mosaic for one large slice; GDCM, a general DICOM library, has a filter that cuts
it. The compressed files are pydicom's samples, encoded by several libraries, and re-encodings of one of them by GDCM.
"""

from pathlib import Path

import gdcm
import numpy as np
import pydicom.data
import pytest
import SimpleITK
from pydicom import dcmread
from pydicom.uid import (
    DeflatedExplicitVRLittleEndian,
    ExplicitVRLittleEndian,
    JPEG2000Lossless,
    JPEGLosslessSV1,
    JPEGLSLossless,
    MRImageStorage,
    RLELossless,
)

from qa.dicom import read

REAL = Path(__file__).resolve().parents[2].parent / "shared" / "data" / "real"
SAMPLES = Path(pydicom.data.__file__).parent / "test_files"
CLASSIC = [
    "bottle-epi",
    "sectioned-body-epi",
    "sphere-epi-sagittal-classic-1",
    "sphere-epi-sagittal-classic-2",
    "sphere-gre-phase-difference-1",
    "sphere-gre-phase-difference-2",
    "sphere-gre-two-echo-repeat-1",
    "sphere-gre-two-echo-repeat-2",
]
MOSAICS = [f"sphere-epi-mosaic-{direction}" for direction in ("ap", "pa", "rl", "lr")]
needs_real = pytest.mark.skipif(not REAL.is_dir(), reason="the real scans are not beside this checkout")


def decoded(path):
    image = SimpleITK.ReadImage(str(path))
    return image, SimpleITK.GetArrayFromImage(image)


def assert_same_mapping(image, plane, index=0):
    """Compare corners and an inner point, in patient mm; SimpleITK indexes (column, row, slice)."""
    rows, columns = plane.shape
    for row, column in [(0, 0), (rows - 1, 0), (0, columns - 1), (rows - 1, columns - 1), (rows // 3, columns // 4)]:
        theirs = image.TransformIndexToPhysicalPoint((column, row, index))
        ours = plane.to_patient(column * plane.pixel_mm[1], row * plane.pixel_mm[0])
        np.testing.assert_allclose(ours, theirs, rtol=0, atol=1e-6)


@needs_real
@pytest.mark.parametrize("folder", CLASSIC)
def test_classic_images_of_real_scanners(folder):
    reading = read(REAL / folder)
    assert reading.refused == ()
    compared = 0
    for acquisition in reading.acquisitions:
        for series in acquisition.repeats[:3]:
            for file, plane, pixels in zip(series.files, series.planes, series.pixels, strict=True):
                image, theirs = decoded(file.path)
                assert_same_mapping(image, plane)
                np.testing.assert_allclose(pixels, theirs[0], rtol=1e-7, atol=0)  # float32 rounds SimpleITK's float64
                compared += 1
    assert compared >= 24


@needs_real
def test_enhanced_objects_of_a_real_scanner():
    (acquisition,) = read(REAL / "sphere-epi-sagittal-enhanced").acquisitions
    assert len(acquisition.repeats) == 5
    for series in acquisition.repeats:
        image, theirs = decoded(series.files[0].path)
        # SimpleITK keeps the file's order, from right to left; ours runs along the normal, the other way.
        np.testing.assert_array_equal(series.pixels, theirs[::-1])
        count = len(series.planes)
        for index in (0, 20, count - 1):
            assert_same_mapping(image, series.planes[index], count - 1 - index)


@needs_real
@pytest.mark.parametrize("folder", MOSAICS)
def test_mosaics_of_a_real_scanner(folder):
    (acquisition,) = read(REAL / folder).acquisitions
    assert len(acquisition.repeats) == 2
    for series in acquisition.repeats:
        path = str(series.files[0].path)
        _, whole = decoded(path)
        rows, columns = series.planes[0].shape
        for index, pixels in enumerate(series.pixels):
            row, column = divmod(index, 3)
            tile = whole[0, row * rows : (row + 1) * rows, column * columns : (column + 1) * columns]
            np.testing.assert_array_equal(pixels, tile)
        reader = gdcm.ImageReader()
        reader.SetFileName(path)
        assert reader.Read()
        splitter = gdcm.SplitMosaicFilter()
        splitter.SetImage(reader.GetImage())
        splitter.SetFile(reader.GetFile())
        assert splitter.Split()
        split = splitter.GetImage()
        assert [split.GetDimension(axis) for axis in range(3)] == [columns, rows, len(series.planes)]
        np.testing.assert_allclose(series.planes[0].position_patient, [split.GetOrigin(axis) for axis in range(3)], atol=1e-9)
        step = series.planes[1].position_along_normal - series.planes[0].position_along_normal
        assert step == pytest.approx(split.GetSpacing(2))
        volume = np.frombuffer(split.GetBuffer().encode("utf-8", "surrogateescape"), dtype="<u2")
        np.testing.assert_array_equal(series.pixels.ravel(), volume)


@pytest.mark.parametrize(
    "name",
    [
        "MR_small.dcm",
        "MR_small_bigendian.dcm",
        "MR_small_implicit.dcm",
        "MR_small_padded.dcm",
        "MR_small_RLE.dcm",
        "MR_small_jp2klossless.dcm",
        "MR_small_jpeg_ls_lossless.dcm",
    ],
)
def test_transfer_syntaxes_of_sample_files(name):
    reading = read(SAMPLES / name)
    assert reading.refused == ()
    (acquisition,) = reading.acquisitions
    image, theirs = decoded(SAMPLES / name)
    np.testing.assert_array_equal(acquisition.pixels, theirs)
    assert_same_mapping(image, acquisition.planes[0])


@pytest.mark.parametrize(
    ("syntax", "name"),
    [
        (JPEGLosslessSV1, "JPEGLosslessProcess14_1"),
        (JPEG2000Lossless, "JPEG2000Lossless"),
        (JPEGLSLossless, "JPEGLSLossless"),
        (RLELossless, "RLELossless"),
        (DeflatedExplicitVRLittleEndian, "DeflatedExplicitVRLittleEndian"),
    ],
)
def test_files_encoded_by_gdcm(tmp_path, syntax, name):
    reader = gdcm.ImageReader()
    reader.SetFileName(str(SAMPLES / "MR_small.dcm"))
    assert reader.Read()
    change = gdcm.ImageChangeTransferSyntax()
    change.SetTransferSyntax(gdcm.TransferSyntax(getattr(gdcm.TransferSyntax, name)))
    change.SetInput(reader.GetImage())
    assert change.Change()
    writer = gdcm.ImageWriter()
    path = tmp_path / "encoded.dcm"
    writer.SetFileName(str(path))
    writer.SetFile(reader.GetFile())
    writer.SetImage(change.GetOutput())
    assert writer.Write()
    assert dcmread(path).file_meta.TransferSyntaxUID == syntax
    reading = read(path)
    assert reading.refused == ()
    expected = SimpleITK.GetArrayFromImage(SimpleITK.ReadImage(str(SAMPLES / "MR_small.dcm")))
    np.testing.assert_array_equal(reading.acquisitions[0].pixels, expected)
    np.testing.assert_array_equal(decoded(path)[1], expected)


@pytest.mark.parametrize("stored", [12, 16])
def test_monochrome1_is_turned_over_as_itk_does(tmp_path, stored):
    dataset = dcmread(SAMPLES / "MR_small.dcm")
    dataset.PhotometricInterpretation = "MONOCHROME1"
    values = dataset.pixel_array.astype(np.uint16) & (2**stored - 1)
    dataset.PixelRepresentation, dataset.BitsStored, dataset.HighBit = 0, stored, stored - 1
    dataset.PixelData = values.tobytes()
    dataset.file_meta.TransferSyntaxUID = ExplicitVRLittleEndian
    dataset.save_as(tmp_path / "one.dcm")
    ours = read(tmp_path).acquisitions[0].pixels
    np.testing.assert_array_equal(ours, decoded(tmp_path / "one.dcm")[1])
    np.testing.assert_array_equal(ours[0], 2**stored - 1 - values.astype(float))


@pytest.mark.parametrize("slope", [0.25, 1.290354])
def test_rescaled_and_oblique_anisotropic_images(tmp_path, slope):
    dataset = dcmread(SAMPLES / "MR_small.dcm")
    dataset.RescaleSlope, dataset.RescaleIntercept = slope, 3
    dataset.PixelSpacing = [0.7, 1.5]
    dataset.ImageOrientationPatient = [0.8, 0.6, 0, 0, 0, -1]
    dataset.ImagePositionPatient = [-50.5, 20.25, 7]
    dataset.save_as(tmp_path / "oblique.dcm")
    series = read(tmp_path).acquisitions[0].first
    image, theirs = decoded(tmp_path / "oblique.dcm")
    np.testing.assert_allclose(series.pixels, theirs, rtol=1e-7)
    assert_same_mapping(image, series.planes[0])


@pytest.mark.parametrize(("name", "within"), [("JPGExtended.dcm", 1), ("JPEG2000.dcm", 0), ("J2K_pixelrep_mismatch.dcm", 0)])
def test_lossy_and_odd_codestreams(tmp_path, name, within):
    """Samples of other modalities, declared MR; decoders of lossy JPEG may round the inverse cosine transform apart by one."""
    dataset = dcmread(SAMPLES / name)
    dataset.Modality = "MR"
    dataset.SOPClassUID = dataset.file_meta.MediaStorageSOPClassUID = MRImageStorage
    dataset.PatientBirthDate = ""
    dataset.ImagePositionPatient, dataset.ImageOrientationPatient, dataset.PixelSpacing = [0, 0, 0], [1, 0, 0, 0, 1, 0], [1, 1]
    if "NumberOfFrames" in dataset:
        del dataset.NumberOfFrames
    dataset.save_as(tmp_path / "declared.dcm")
    ours = read(tmp_path).acquisitions[0].pixels
    theirs = decoded(tmp_path / "declared.dcm")[1]
    assert np.ptp(ours) > 100
    assert np.max(np.abs(ours - theirs)) <= within
