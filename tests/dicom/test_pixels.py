"""Stored bytes to output values: bits, signs, scales and transfer syntaxes, against the numbers that were written."""

import sys

import numpy as np
import pytest
from pydicom.uid import (
    DeflatedExplicitVRLittleEndian,
    ExplicitVRBigEndian,
    ExplicitVRLittleEndian,
    ImplicitVRLittleEndian,
    JPEG2000Lossless,
    JPEGLSLossless,
    JPEGLSNearLossless,
    RLELossless,
)

from qa.dicom import read
from qa.dicom.elements import parse
from qa.dicom.isolated import IsolatedDecoder
from qa.dicom.refusal import RefusalError
from qa.errors import FaultError


def values(path):
    reading = read(path)
    assert reading.refused == ()
    return reading.acquisitions[0].pixels[0]


def reason(path):
    reading = read(path)
    assert reading.acquisitions == ()
    return reading.refused[0].reason


def test_bits_that_hold_no_pixel_are_taken_out(tmp_path, make):
    pixels = make.pattern()
    garbage = pixels | (make.pattern(seed=1, high=16) << 12).astype(np.uint16)
    make.save(make.image(pixels=garbage, BitsStored=12, HighBit=11), tmp_path / "a.dcm")
    np.testing.assert_array_equal(values(tmp_path), pixels)


def test_pixels_in_the_upper_bits_are_brought_down(tmp_path, make):
    pixels = make.pattern()
    make.save(make.image(pixels=(pixels << 4) | 5, BitsStored=12, HighBit=15), tmp_path / "a.dcm")
    np.testing.assert_array_equal(values(tmp_path), pixels)


@pytest.mark.parametrize("garbage", [0, 0xF000])
def test_the_sign_of_twelve_bits_is_carried_up(tmp_path, make, garbage):
    signed = make.pattern().astype(np.int16) - 2048
    stored = (signed.view(np.uint16) & 0x0FFF) | garbage
    image = make.image(pixels=stored, BitsStored=12, HighBit=11, PixelRepresentation=1, ImageType=["ORIGINAL", "PRIMARY", "R"])
    make.save(image, tmp_path / "a.dcm")
    np.testing.assert_array_equal(values(tmp_path), signed)


@pytest.mark.parametrize("kind", ["u1", "i1", "u2", "i2", "u4", "i4"])
@pytest.mark.parametrize("syntax", [ExplicitVRLittleEndian, ImplicitVRLittleEndian, ExplicitVRBigEndian])
def test_every_width_sign_and_byte_order(tmp_path, make, kind, syntax):
    low = -100 if kind[0] == "i" else 0
    pixels = np.random.default_rng(3).integers(low, 127, (6, 5)).astype(kind)
    image = make.image(pixels=pixels, ImageType=["ORIGINAL", "PRIMARY", "R"])
    make.save(image, tmp_path / "a.dcm", syntax)
    np.testing.assert_array_equal(values(tmp_path), pixels)


@pytest.mark.parametrize("vr", ["OB", "OW"])
def test_eight_bit_pixels_in_big_endian_bytes_and_words(tmp_path, make, vr):
    pixels = make.pattern((6, 5), high=256).astype(np.uint8)
    image = make.image(pixels=pixels)
    image.file_meta.TransferSyntaxUID = ExplicitVRBigEndian
    raw = pixels.tobytes()
    image.PixelData = raw if vr == "OB" else np.frombuffer(raw, "<u2").byteswap().tobytes()
    image["PixelData"].VR = vr
    image.save_as(tmp_path / "a.dcm", enforce_file_format=True)
    np.testing.assert_array_equal(values(tmp_path), pixels)


@pytest.mark.parametrize(("slope", "intercept"), [(2, -4096), (1.29035409035409, 0), (0.5, 10), (-1, 5)])
def test_rescale_is_applied_to_each_image_by_its_own_numbers(tmp_path, make, slope, intercept):
    pixels = make.pattern()
    kinds = ["ORIGINAL", "PRIMARY", "P"]
    make.save(make.image(pixels=pixels, RescaleSlope=slope, RescaleIntercept=intercept, ImageType=kinds), tmp_path / "a.dcm")
    expected = (pixels.astype(np.float64) * slope + intercept).astype(np.float32)
    np.testing.assert_array_equal(values(tmp_path), expected)


def test_slices_of_one_series_keep_their_own_slopes(tmp_path, make):
    for number, slope in enumerate([1.0, 1.5, 3.0], start=1):
        image = make.image(number, position=(-10, -12, number), RescaleSlope=slope, RescaleIntercept=0)
        make.save(image, tmp_path / f"{number}.dcm")
    (acquisition,) = read(tmp_path).acquisitions
    for number, slope in enumerate([1.0, 1.5, 3.0], start=1):
        np.testing.assert_array_equal(acquisition.pixels[number - 1], make.pattern(seed=100 + number) * np.float32(slope))


@pytest.mark.parametrize(("signed", "stored", "turned"), [(0, 12, 4095), (0, 16, 65535), (1, 16, -1)])
def test_monochrome1_is_turned_over_within_the_stored_range(tmp_path, make, signed, stored, turned):
    pixels = make.pattern().astype(np.int16 if signed else np.uint16)
    image = make.image(pixels=pixels, PhotometricInterpretation="MONOCHROME1", BitsStored=stored, HighBit=stored - 1)
    image.ImageType = ["ORIGINAL", "PRIMARY", "R"]
    make.save(image, tmp_path / "a.dcm")
    series = read(tmp_path).acquisitions[0].first
    np.testing.assert_array_equal(series.pixels[0], turned - pixels.astype(np.float64))
    assert "MONOCHROME1" in series.remarks[0]


def test_padding_reads_as_zero(tmp_path, make):
    pixels = make.pattern().astype(np.int16)
    pixels[:3] = -2000
    pixels[3] = -1990
    image = make.image(pixels=pixels, RescaleSlope=2, RescaleIntercept=100, PixelPaddingValue=-2000)
    image.PixelPaddingRangeLimit = -1985
    make.save(image, tmp_path / "a.dcm")
    expected = pixels * 2.0 + 100
    expected[:4] = 0
    np.testing.assert_array_equal(values(tmp_path), expected)


def test_signed_padding_in_implicit_encoding(tmp_path, make):
    pixels = make.pattern().astype(np.int16)
    pixels[:3] = -2000
    make.save(make.image(pixels=pixels, PixelPaddingValue=-2000), tmp_path / "a.dcm", ImplicitVRLittleEndian)
    assert np.all(values(tmp_path)[:3] == 0)
    np.testing.assert_array_equal(values(tmp_path)[3:], pixels[3:])


@pytest.mark.parametrize(("keyword", "kind", "bits"), [("FloatPixelData", "<f4", 32), ("DoubleFloatPixelData", "<f8", 64)])
def test_floating_point_pixels(tmp_path, make, keyword, kind, bits):
    pixels = make.pattern().astype(kind) / 7
    image = make.image(BitsAllocated=bits)
    del image.PixelData, image.BitsStored, image.HighBit, image.PixelRepresentation
    setattr(image, keyword, pixels.tobytes())
    make.save(image, tmp_path / "a.dcm")
    np.testing.assert_array_equal(values(tmp_path), pixels.astype(np.float32))
    for bad in (np.nan, np.inf, 1e300 if bits == 64 else 3e38):
        pixels[2, 2] = bad
        setattr(image, keyword, pixels.tobytes())
        make.save(image, tmp_path / "a.dcm")
        assert reason(tmp_path) == "it holds pixels that are not finite numbers, or absurdly large ones"


@pytest.mark.parametrize("signed", [False, True])
@pytest.mark.parametrize(
    ("syntax", "plugin"),
    [(RLELossless, "pydicom"), (JPEGLSLossless, "pyjpegls"), (JPEG2000Lossless, "pylibjpeg")],
)
def test_lossless_compression_gives_the_pixels_back(tmp_path, make, syntax, plugin, signed):
    pixels = make.pattern((64, 60))
    if signed:
        pixels = pixels.astype(np.int16) - 2048
    image = make.image(pixels=pixels, BitsStored=12, HighBit=11, ImageType=["ORIGINAL", "PRIMARY", "R"])
    image.compress(syntax, encoding_plugin=plugin)
    make.save(image, tmp_path / "a.dcm")
    np.testing.assert_array_equal(values(tmp_path), pixels)


def test_compressed_frames_of_an_enhanced_object(tmp_path, make):
    pixels = make.pattern((3, 24, 20))
    image = make.enhanced([(-10, -12, 10 * k) for k in range(3)], pixels)
    image.compress(JPEGLSLossless, encoding_plugin="pyjpegls")
    make.save(image, tmp_path / "a.dcm")
    stack = read(tmp_path).acquisitions[0].pixels
    np.testing.assert_array_equal(stack, pixels * np.array([1, 2, 3], dtype=np.float32)[:, None, None])


def test_loss_is_remarked(tmp_path, make):
    image = make.image(pixels=make.pattern((64, 60)), BitsStored=12, HighBit=11)
    image.compress(JPEGLSNearLossless, encoding_plugin="pyjpegls", jls_error=2)
    make.save(image, tmp_path / "a.dcm")
    series = read(tmp_path).acquisitions[0].first
    assert np.max(np.abs(series.pixels[0] - make.pattern((64, 60)))) <= 2
    assert series.remarks == ("the image was compressed with loss: noise and edges are not as scanned",)


def test_deflated_data_sets(tmp_path, make):
    make.save(make.image(pixels=make.pattern()), tmp_path / "a.dcm", DeflatedExplicitVRLittleEndian)
    np.testing.assert_array_equal(values(tmp_path), make.pattern())


@pytest.mark.parametrize(
    ("syntax", "plugin"),
    [(RLELossless, "pydicom"), (JPEGLSLossless, "pyjpegls"), (JPEG2000Lossless, "pylibjpeg")],
)
def test_a_compressed_file_cut_short_or_of_another_size_is_refused(tmp_path, make, syntax, plugin):
    image = make.image(pixels=make.pattern((64, 60)), BitsStored=12, HighBit=11)
    image.compress(syntax, encoding_plugin=plugin)
    path = make.save(image, tmp_path / "a.dcm")
    content = path.read_bytes()
    path.write_bytes(content[: len(content) // 2 + 300])
    assert "pixel data" in reason(tmp_path)
    image.Rows = 80
    make.save(image, path)
    assert "pixel data" in reason(tmp_path)


READY = "import os, sys, time; sys.stdin.buffer.read(8); sys.stdout.buffer.write(b'\\5\\0\\0\\0ready'); sys.stdout.flush(); "
ONE_PIXEL = {"rows": 1, "columns": 1, "number_of_frames": 1}


def test_a_decoder_that_crashes_costs_one_file():
    with IsolatedDecoder(command=(sys.executable, "-c", READY + "os.abort()")) as decoder:
        for _ in range(2):
            with pytest.raises(RefusalError, match="crash or hang"):
                decoder.decode(b"x", ONE_PIXEL)


def test_a_decoder_that_hangs_is_ended():
    command = (sys.executable, "-c", READY + "time.sleep(60)")
    with IsolatedDecoder(seconds=0.3, command=command) as decoder, pytest.raises(RefusalError, match="crash or hang"):
        decoder.decode(b"x", ONE_PIXEL)


def test_a_decoder_that_cannot_be_started_is_a_fault_of_the_machine():
    for command in [("/no/such/program",), (sys.executable, "-c", "raise SystemExit(1)")]:
        with IsolatedDecoder(command=command) as decoder, pytest.raises(FaultError, match="the decoding process"):
            decoder.decode(b"x", ONE_PIXEL)


def test_what_decoders_print_does_not_spoil_the_answer(tmp_path, make, capfd):
    image = make.image(pixels=make.pattern((64, 60)), BitsStored=12, HighBit=11)
    image.compress(JPEG2000Lossless, encoding_plugin="pylibjpeg")
    path = make.save(image, tmp_path / "bad.dcm")
    content = path.read_bytes()
    at = content.index(b"\xff\x52")  # coding style: nonsense there makes decoders complain aloud
    path.write_bytes(content[: at + 4] + b"\xff" * 6 + content[at + 10 :])
    reading = read(tmp_path)
    assert len(reading.refused) == 1
    assert capfd.readouterr() == ("", "")


def test_the_header_is_parsed_without_touching_pixels(tmp_path, make):
    path = make.save(make.image(), tmp_path / "a.dcm")
    parsed = parse(path.read_bytes())
    assert isinstance(parsed.elements.raw(0x7FE00010).value, bytes)
    assert parsed.transfer_syntax == ExplicitVRLittleEndian
