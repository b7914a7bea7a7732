"""Bad files: each is refused with its reason, and the good ones beside it are still read."""

import struct
import zlib

import pytest
from pydicom.dataelem import DataElement
from pydicom.dataset import Dataset
from pydicom.sequence import Sequence
from pydicom.uid import DeflatedExplicitVRLittleEndian

from qa.dicom import read
from qa.dicom.reading import UNFORESEEN


def without(name):
    def change(dataset):
        del dataset[name]

    return change


def setting(**values):
    def change(dataset):
        for name, value in values.items():
            setattr(dataset, name, value)

    return change


def as_text(name, text):
    """Put any text where numbers belong; as a plain text element, which pydicom does not check."""

    def change(dataset):
        dataset[name] = DataElement(dataset[name].tag, "LO", text)

    return change


CASES = {
    "zero rows": (setting(Rows=0, PixelData=b""), "Rows or Columns is missing or zero"),
    "no rows": (without("Rows"), "Rows or Columns is missing or zero"),
    "no position": (without("ImagePositionPatient"), "Image Position (Patient) is missing"),
    "position of two numbers": (setting(ImagePositionPatient=[1, 2]), "Image Position (Patient) is not what it should be"),
    "position far away": (setting(ImagePositionPatient=[1e9, 0, 0]), "Image Position (Patient) is not what it should be"),
    "position not finite": (
        as_text("ImagePositionPatient", "nan\\0\\0 "),
        "Image Position (Patient) is not what it should be",
    ),
    "position in words": (as_text("ImagePositionPatient", "a\\b\\c "), "Image Position (Patient) is not what it should be"),
    "no orientation": (without("ImageOrientationPatient"), "Image Orientation (Patient) is missing"),
    "orientation not perpendicular": (
        setting(ImageOrientationPatient=[1, 0, 0, 0.5, 0.8660254, 0]),
        "Image Orientation (Patient) holds directions that are not perpendicular",
    ),
    "orientation of no length": (
        setting(ImageOrientationPatient=[0, 0, 0, 0, 1, 0]),
        "Image Orientation (Patient) holds directions that are not of unit length",
    ),
    "orientation infinite": (
        as_text("ImageOrientationPatient", "inf\\0\\0\\0\\1\\0 "),
        "Image Orientation (Patient) is not what it should be",
    ),
    "no spacing": (without("PixelSpacing"), "Pixel Spacing is missing"),
    "zero spacing": (setting(PixelSpacing=[0, 1]), "Pixel Spacing is not what it should be"),
    "negative spacing": (setting(PixelSpacing=[-1, 1]), "Pixel Spacing is not what it should be"),
    "absurd spacing": (setting(PixelSpacing=[1e6, 1e6]), "Pixel Spacing is not what it should be"),
    "spacing not finite": (as_text("PixelSpacing", "1\\nan "), "Pixel Spacing is not what it should be"),
    "colour": (setting(PhotometricInterpretation="RGB", SamplesPerPixel=3), "it is a colour image"),
    "palette": (setting(PhotometricInterpretation="PALETTE COLOR"), "it is a colour image"),
    "three samples": (setting(SamplesPerPixel=3), "it is a colour image"),
    "no such photometry": (setting(PhotometricInterpretation="SEPIA"), "Photometric Interpretation is none"),
    "no pixels": (without("PixelData"), "it holds no pixel data"),
    "pixels of two kinds": (setting(FloatPixelData=bytes(1920)), "it holds pixel data of more than one kind"),
    "pixels cut": (setting(PixelData=bytes(100)), "the pixel data are cut short: 100 of 960 bytes"),
    "absurd size": (
        setting(Rows=65535, Columns=65535),
        "an image of 65535 x 65535 pixels is more than any phantom series holds",
    ),
    "absurd frames": (setting(NumberOfFrames=2**31 - 1), "2147483647 frames of 24 x 20 pixels is more"),
    "no frames": (setting(NumberOfFrames=0), "Number of Frames is not a count"),
    "frames in words": (as_text("InstanceNumber", "x "), ""),
    "twelve bits allocated": (setting(BitsAllocated=12), "Bits Allocated is not 8, 16 or 32"),
    "one bit": (setting(BitsAllocated=1), "Bits Allocated is not 8, 16 or 32"),
    "more stored than allocated": (setting(BitsStored=17), "Bits Stored or High Bit does not fit"),
    "no bit stored": (setting(BitsStored=0), "Bits Stored or High Bit does not fit"),
    "high bit too high": (setting(BitsStored=12, HighBit=16), "Bits Stored or High Bit does not fit"),
    "high bit too low": (setting(BitsStored=12, HighBit=3), "Bits Stored or High Bit does not fit"),
    "signed twice": (setting(PixelRepresentation=2), "Pixel Representation is neither"),
    "slope zero": (setting(RescaleSlope=0, RescaleIntercept=0), "Rescale Slope or Rescale Intercept is not a number"),
    "slope huge": (setting(RescaleSlope="1e38", RescaleIntercept=0), "Rescale Slope or Rescale Intercept is not a number"),
    "no SOP instance": (without("SOPInstanceUID"), "SOP Instance UID is missing"),
    "no series": (without("SeriesInstanceUID"), "Series or Study Instance UID is missing"),
    "no study": (without("StudyInstanceUID"), "Series or Study Instance UID is missing"),
    "a CT slice": (setting(Modality="CT", SOPClassUID="1.2.840.10008.5.1.4.1.1.2"), "Modality is CT"),
}


@pytest.mark.parametrize("case", CASES)
def test_a_bad_file_is_refused_and_the_good_ones_read(write_series, make, case):
    change, reason = CASES[case]
    folder = write_series(3)
    dataset = make.image(9, position=(-10, -12, 30))
    change(dataset)
    make.save(dataset, folder / "bad.dcm")
    reading = read(folder)
    (acquisition,) = reading.acquisitions
    if not reason:
        assert reading.refused == ()
        assert acquisition.pixels.shape[0] == 4
        return
    assert [each.path.name for each in reading.refused] == ["bad.dcm"]
    assert reading.refused[0].reason.startswith(reason)
    assert acquisition.pixels.shape[0] == 3


def test_an_image_of_nothing_but_zeros_is_read(tmp_path, make):
    make.save(make.image(pixels=make.pattern() * 0), tmp_path / "a.dcm")
    assert read(tmp_path).acquisitions[0].pixels.max() == 0


@pytest.mark.parametrize("share", [0.02, 0.1, 0.3, 0.6, 0.9, 0.999])
def test_a_file_cut_anywhere_is_refused(write_series, share):
    folder = write_series(2)
    path = folder / "002.dcm"
    content = path.read_bytes()
    path.write_bytes(content[: int(len(content) * share)])
    reading = read(folder)
    assert [each.path.name for each in reading.refused] == ["002.dcm"]
    assert not reading.refused[0].reason.startswith(UNFORESEEN)
    assert reading.acquisitions[0].pixels.shape[0] == 1


def test_an_unknown_transfer_syntax_is_refused(tmp_path, make):
    path = make.save(make.image(), tmp_path / "a.dcm")
    content = path.read_bytes()
    for syntax in (b"1.2.840.10008.9.9.9", b"not even a number!!", b"1.2.840.10008.1.2.4.102"[:19]):
        path.write_bytes(content.replace(b"1.2.840.10008.1.2.1", syntax, 1))
        assert read(tmp_path).refused[0].reason == "its transfer syntax is not one that can be decoded"


def test_a_deflated_file_that_swells_without_end_is_refused(tmp_path, make):
    path = make.save(make.image(), tmp_path / "a.dcm", DeflatedExplicitVRLittleEndian)
    content = path.read_bytes()
    meta = content[: 144 + struct.unpack_from("<I", content, 140)[0]]
    press = zlib.compressobj(9, zlib.DEFLATED, -15)
    swelling = press.compress(bytes(2**26)) + press.compress(bytes(2**20)) + press.flush()
    assert len(swelling) < 2**17
    path.write_bytes(meta + swelling)
    assert read(tmp_path).refused[0].reason.startswith("its deflated content swells")
    path.write_bytes(meta + content[len(meta) : -40])
    assert read(tmp_path).refused[0].reason == "the file is cut short: its deflated content does not end"
    path.write_bytes(meta + b"\xff" * 50)
    assert "cannot be inflated" in read(tmp_path).refused[0].reason


def test_sequences_nested_without_end_are_survived(tmp_path, make):
    path = make.save(make.image(), tmp_path / "a.dcm")
    content = path.read_bytes()
    at = content.index(b"\x28\x00\x02\x00US")
    opening = b"\x18\x00\x00\x93SQ\0\0\xff\xff\xff\xff\xfe\xff\x00\xe0\xff\xff\xff\xff"
    path.write_bytes(content[:at] + opening * 20_000 + content[at:])
    assert len(read(tmp_path).refused) == 1


def test_a_sequence_in_place_of_a_text_says_nothing(tmp_path, make):
    inner = Dataset()
    inner.PatientName = "Weatherby^Anneliese"
    image = make.image()
    del image.SeriesDescription
    image.add_new(0x0008103E, "SQ", Sequence([inner]))
    make.save(image, tmp_path / "a.dcm")
    (acquisition,) = read(tmp_path).acquisitions
    assert acquisition.first.description == ""


def test_private_rubbish_does_no_harm(tmp_path, make):
    image = make.image()
    for group in (0x0019, 0x0021, 0x0029, 0x0043, 0x0051, 0x2001, 0x2005):
        for creator in ("SIEMENS MR HEADER", "SIEMENS CSA HEADER", "GEMS_PARM_01", "Philips Imaging DD 001"):
            block = image.private_block(group, creator, create=True)
            for offset in (0x0A, 0x0F, 0x10, 0x11, 0x2F, 0x83):
                block.add_new(offset, "OB", b"\xff\xfe\x00rubbish\x1b")
    make.save(image, tmp_path / "a.dcm")
    assert len(read(tmp_path).acquisitions) == 1


def test_numbers_of_the_wrong_kind_read_as_absent(tmp_path, make):
    image = make.image()
    for name in ("EchoTime", "RepetitionTime", "FlipAngle", "SliceThickness", "ImagingFrequency", "MagneticFieldStrength"):
        as_text(name, "many")(image)
    for name in ("EchoNumbers", "AcquisitionNumber", "InstanceNumber", "SeriesNumber"):
        as_text(name, "1e400")(image)
    as_text("AcquisitionTime", "99:99")(image)
    make.save(image, tmp_path / "a.dcm")
    settings = read(tmp_path).acquisitions[0].settings
    assert (settings.echo_ms, settings.repetition_ms, settings.flip_deg, settings.frequency_MHz) == (None, None, None, None)
