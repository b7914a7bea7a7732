"""Slices into stacks, stacks into acquisitions."""

import numpy as np
import pytest
from pydicom.uid import RLELossless

from qa.dicom import read

ORIGIN = (-10.0, -12.0, 0.0)


def only(reading):
    assert reading.refused == ()
    (acquisition,) = reading.acquisitions
    return acquisition


def heights(series):
    return [round(plane.position_along_normal, 3) for plane in series.planes]


def test_one_series_gives_its_planes_pixels_and_settings(write_series, make):
    acquisition = only(read(write_series(5)))
    series = acquisition.first
    assert series.pixels.shape == (5, 24, 20)
    assert series.pixels.dtype == np.float32
    assert not series.pixels.flags.writeable
    assert heights(series) == [-20, -10, 0, 10, 20]
    for number, image in enumerate(series.pixels, start=1):
        np.testing.assert_array_equal(image, make.pattern(seed=100 + number))
    settings = series.settings
    assert (settings.protocol, settings.receive_coil, settings.phase_encode) == ("QA_SE", "HEAD", "column")
    assert (settings.slice_thickness_mm, settings.slice_spacing_mm, settings.pixel_mm) == (5, 10, (1.25, 1.0))
    assert settings.matrix == (24, 20)
    assert (settings.repetition_ms, settings.echo_ms, settings.flip_deg, settings.averages) == (500, 20, 90, 1)
    assert (settings.bandwidth_hz_per_pixel, settings.frequency_MHz) == (150, 127.732)
    assert series.acquired_at.isoformat() == "2026-11-23T07:42:01.500000"
    assert (series.scanner.station, series.scanner.serial, series.scanner.field_strength_T) == ("NORTH3T", "40071", 3.0)
    assert (series.scanner.manufacturer, series.scanner.model, series.scanner.software) == ("Invented", "Model 7", "1")
    assert series.kind == "magnitude"
    assert series.remarks == ()
    assert len({each.sha256 for each in series.files}) == 5
    assert [each.path.name for each in series.files] == [f"{number:03d}.dcm" for number in range(1, 6)]


def test_pixel_zero_zero_lies_where_the_header_says(write_series):
    plane = only(read(write_series(1))).planes[0]
    # One column is 1.0 mm along x, one row 1.25 mm along y (PS3.3, C.7.6.2.1.1: the first spacing is between rows).
    np.testing.assert_allclose(plane.to_patient(3 * 1.0, 2 * 1.25), [-10 + 3, -12 + 2.5, -20])


def test_position_counts_not_instance_number_nor_file_name(tmp_path, make):
    for number, (name, height) in enumerate([("c", 10), ("a", -10), ("b", 0)], start=1):
        make.save(make.image(10 - number, position=(-10, -12, height)), tmp_path / name)
    series = only(read(tmp_path)).first
    assert heights(series) == [-10, 0, 10]
    assert [each.path.name for each in series.files] == ["a", "b", "c"]


@pytest.mark.parametrize(
    ("orientation", "normal"),
    [
        ([0, 1, 0, 0, 0, -1], (-1, 0, 0)),  # sagittal
        ([1, 0, 0, 0, 0, -1], (0, 1, 0)),  # coronal
        ([0.8, 0.6, 0, 0, 0, -1], (-0.6, 0.8, 0)),  # oblique
        ([-1, 0, 0, 0, 1, 0], (0, 0, -1)),  # axial, seen from the other side
    ],
)
def test_slices_are_ordered_along_row_cross_column(tmp_path, make, orientation, normal):
    for number in (1, 2, 3):
        position = [-7.0 * number * component for component in normal]
        make.save(make.image(number, position=position, ImageOrientationPatient=orientation), tmp_path / f"{number}.dcm")
    series = only(read(tmp_path)).first
    np.testing.assert_allclose(series.planes[0].normal, normal, atol=1e-12)
    assert heights(series) == [-21, -14, -7]


def test_an_orientation_of_few_digits_becomes_exactly_perpendicular(tmp_path, make):
    make.save(make.image(ImageOrientationPatient=[0.97332, 0, 0.22945, 0.0001, 1, 0]), tmp_path / "a.dcm")
    axes = only(read(tmp_path)).planes[0].axes
    np.testing.assert_allclose(axes.T @ axes, np.eye(3), atol=1e-15)


def test_two_series_of_one_study_are_repeats_in_order_of_time(write_series, tmp_path):
    write_series(3, series=2, AcquisitionTime="070000")
    write_series(3, series=1)
    acquisition = only(read(tmp_path))
    assert [each.settings.protocol for each in acquisition.repeats] == ["QA_SE", "QA_SE"]
    assert [each.series_instance_uid[-2:] for each in acquisition.repeats] == [".2", ".1"]
    assert acquisition.first.acquired_at.isoformat() == "2026-11-23T07:00:00"


@pytest.mark.parametrize(
    "changed",
    [
        {"StudyInstanceUID": "1.2.3"},
        {"EchoTime": 21},
        {"RepetitionTime": 600},
        {"FlipAngle": 80},
        {"SliceThickness": 4},
        {"NumberOfAverages": 2},
        {"PixelBandwidth": 200},
        {"PixelSpacing": [1.25, 1.01]},
        {"ReceiveCoilName": "BODY"},
        {"InPlanePhaseEncodingDirection": "ROW"},
        {"ImageType": ["ORIGINAL", "PRIMARY", "P", "ND"]},
        {"ImageType": ["ORIGINAL", "PRIMARY", "M", "NORM"]},
        {"ImageOrientationPatient": [0, 1, 0, 0, 0, -1]},
        {"EchoNumbers": 2},
        {"InversionTime": 100},
    ],
)
def test_what_was_not_scanned_alike_is_no_repeat(write_series, tmp_path, changed):
    write_series(1, series=1)
    write_series(1, series=2, **changed)
    reading = read(tmp_path)
    assert [len(each.repeats) for each in reading.acquisitions] == [1, 1]


@pytest.mark.parametrize("changed", [{"ProtocolName": "QA_SE_2"}, {"ImagingFrequency": 127.7321}, {"EchoTime": 20.0001}])
def test_protocol_name_and_drift_of_frequency_do_not_part_repeats(write_series, tmp_path, changed):
    write_series(1, series=1)
    write_series(1, series=2, **changed)
    assert len(only(read(tmp_path)).repeats) == 2


def test_a_shifted_series_is_no_repeat(write_series, tmp_path, make):
    write_series(1, series=1)
    make.save(make.image(1, 2, (-10.0, -12.5, -20.0)), tmp_path / "shifted.dcm")
    assert [len(each.repeats) for each in read(tmp_path).acquisitions] == [1, 1]


def test_another_receive_coil_is_named(write_series, tmp_path):
    write_series(1, series=1)
    write_series(1, series=2, ReceiveCoilName="BODY")
    first, second = read(tmp_path).acquisitions
    assert first.remarks == ()
    assert len(second.remarks) == 1
    assert "in all but the receive coil (BODY, there HEAD)" in second.remarks[0]


def test_a_series_stored_twice_is_not_its_own_repeat(write_series, tmp_path, make):
    write_series(1, series=1, pixels=make.pattern())
    write_series(1, series=2, pixels=make.pattern())
    first, second = read(tmp_path).acquisitions
    assert "same pixels as series" in second.remarks[0]
    assert first.first.series_instance_uid.endswith(".1")


def test_different_rescale_slopes_of_repeats_are_remarked(write_series, tmp_path):
    write_series(1, series=1, RescaleSlope=1.0, RescaleIntercept=0)
    write_series(1, series=2, RescaleSlope=1.5, RescaleIntercept=0)
    assert "rescaled with different slopes" in only(read(tmp_path)).remarks[0]


def test_echoes_of_one_series_are_told_apart(tmp_path, make):
    for echo, time in [(1, 5.19), (2, 7.65)]:
        for slice_ in range(3):
            image = make.image(10 * echo + slice_, position=(-10, -12, 10 * slice_), EchoNumbers=echo, EchoTime=time)
            make.save(image, tmp_path / f"{echo}-{slice_}.dcm")
    reading = read(tmp_path)
    assert [(each.settings.echo_ms, each.pixels.shape[0]) for each in reading.acquisitions] == [(5.19, 3), (7.65, 3)]


@pytest.mark.parametrize(
    ("values", "kind"),
    [
        (["ORIGINAL", "PRIMARY", "M", "ND"], "magnitude"),
        (["ORIGINAL", "PRIMARY", "P", "ND"], "phase"),
        (["ORIGINAL", "PRIMARY", "PHASE MAP", "P", "FFE"], "phase"),
        (["ORIGINAL", "PRIMARY", "R_FFE", "R", "FFE"], "real"),
        (["ORIGINAL", "PRIMARY", "I"], "imaginary"),
        (["ORIGINAL", "PRIMARY", "M_FFE", "M", "FFE"], "magnitude"),
        (["ORIGINAL", "PRIMARY", "OTHER"], "magnitude"),
        (["ORIGINAL", "PRIMARY"], "magnitude"),
        (["DERIVED", "PRIMARY", "ADC", "ND"], "other"),
        (["DERIVED", "PRIMARY", "T2 MAP"], "other"),
    ],
)
def test_kinds_are_told_by_image_type(tmp_path, make, values, kind):
    make.save(make.image(ImageType=values), tmp_path / "a.dcm")
    assert only(read(tmp_path)).first.kind == kind


@pytest.mark.parametrize(("number", "kind"), list(enumerate(["magnitude", "phase", "real", "imaginary"])))
def test_kinds_are_told_by_a_private_element_where_image_type_says_nothing(tmp_path, make, number, kind):
    image = make.image(ImageType=["ORIGINAL", "PRIMARY", "OTHER"])
    image.private_block(0x0043, "GEMS_PARM_01", create=True).add_new(0x2F, "SS", number)
    make.save(image, tmp_path / "a.dcm")
    assert only(read(tmp_path)).first.kind == kind


def test_negative_values_are_not_taken_for_magnitude(tmp_path, make):
    image = make.image(ImageType=["ORIGINAL", "PRIMARY", "OTHER"], RescaleSlope=2, RescaleIntercept=-4096)
    make.save(image, tmp_path / "a.dcm")
    series = only(read(tmp_path)).first
    assert series.kind == "other"
    assert series.remarks == ("it holds negative values, as a magnitude image cannot: not taken for one",)


@pytest.mark.parametrize("tag", ["TemporalPositionIdentifier", "AcquisitionNumber", "AcquisitionTime", "InstanceNumber"])
def test_time_points_of_one_series_are_repeats(tmp_path, make, tag):
    for point in (1, 2, 3):
        for slice_ in range(4):
            number = 100 * slice_ + point
            value = {"AcquisitionTime": f"07420{point}", "InstanceNumber": number}.get(tag, point)
            image = make.image(number, position=(-10, -12, 10 * slice_), AcquisitionTime="074200")
            setattr(image, tag, value)
            make.save(image, tmp_path / f"{number}.dcm")
    acquisition = only(read(tmp_path))
    assert [each.temporal_position for each in acquisition.repeats] == [1, 2, 3]
    for point, series in enumerate(acquisition.repeats, start=1):
        expected = [make.pattern(seed=100 + 100 * slice_ + point) for slice_ in range(4)]
        np.testing.assert_array_equal(series.pixels, expected)


def test_slice_times_that_interleave_do_not_mix_time_points(tmp_path, make):
    times = {(1, 0): "074200.0", (1, 1): "074200.5", (2, 0): "074202.0", (2, 1): "074202.5"}
    for (point, slice_), time in times.items():
        image = make.image(10 * point + slice_, position=(-10, -12, 10 * slice_), AcquisitionTime=time)
        make.save(image, tmp_path / f"{point}{slice_}.dcm")
    acquisition = only(read(tmp_path))
    assert [[int(each.path.stem) for each in series.files] for series in acquisition.repeats] == [[10, 11], [20, 21]]


def test_an_interrupted_time_point_is_kept_apart_and_says_what_it_lacks(tmp_path, make):
    for point in (1, 2):
        for slice_ in range(4 if point == 1 else 2):
            number = 10 * point + slice_
            image = make.image(number, position=(-10, -12, 10 * slice_), TemporalPositionIdentifier=point)
            make.save(image, tmp_path / f"{number}.dcm")
    whole, part = read(tmp_path).acquisitions
    assert whole.first.remarks == ()
    assert part.first.remarks == ("it holds 2 of the 4 slices of its series: none at 20.0, 30.0 mm",)


def test_a_missing_slice_is_named(write_series):
    folder = write_series(6)
    (folder / "004.dcm").unlink()
    series = only(read(folder)).first
    assert series.remarks == (
        "1 slice is missing between slice 3 (at 0.0 mm) and slice 4 (at 20.0 mm): 20.0 mm apart, where 10.0 mm is usual",
    )


def test_every_other_slice_missing_is_seen_by_the_nominal_spacing(write_series):
    folder = write_series(5)
    for name in ("002.dcm", "004.dcm"):
        (folder / name).unlink()
    assert len(only(read(folder)).first.remarks) == 2


@pytest.mark.parametrize("nominal", [None, 10, 5, 3.3])
def test_even_slices_are_not_called_uneven_whatever_the_nominal_spacing(write_series, nominal):
    # 5 is the gap between slices 5 mm thick and 10 mm apart, which some scanners write as the spacing.
    assert only(read(write_series(5, SpacingBetweenSlices=nominal))).first.remarks == ()


def test_uneven_spacing_is_named(write_series, make):
    folder = write_series(4)
    make.save(make.image(9, position=(-10, -12, 24)), folder / "009.dcm")
    (remark,) = only(read(folder)).first.remarks
    assert remark.startswith("slices are unevenly spaced between slice 4 (at 10.0 mm) and slice 5 (at 24.0 mm)")


def test_spacing_is_found_from_positions_where_the_header_has_none(write_series):
    assert only(read(write_series(3, step=7.0, SpacingBetweenSlices=None))).settings.slice_spacing_mm == pytest.approx(7.0)


def test_a_second_image_at_a_place_is_left_out_and_named(write_series, make):
    folder = write_series(5)
    make.save(make.image(77, position=(-10, -12, 0)), folder / "077.dcm")
    reading = read(folder)
    assert [(each.path.name, each.reason) for each in reading.refused] == [
        ("077.dcm", "a further image at 0.0 mm, where its series holds one already")
    ]
    (acquisition,) = reading.acquisitions
    assert acquisition.pixels.shape[0] == 5
    assert acquisition.first.remarks == ("a second image at 0.0 mm was left out: 077.dcm",)


def test_a_copy_of_a_file_is_read_once(write_series):
    folder = write_series(3)
    (folder / "copy.dcm").write_bytes((folder / "002.dcm").read_bytes())
    series = only(read(folder)).first
    assert series.pixels.shape[0] == 3
    assert series.remarks == ("copy.dcm is a copy of 002.dcm and was read once",)


def test_the_same_image_in_another_transfer_syntax_is_a_copy(write_series, make):
    folder = write_series(3)
    image = make.image(2, position=(-10, -12, -10))
    image.compress(RLELossless, encoding_plugin="pydicom", generate_instance_uid=False)
    make.save(image, folder / "packed.dcm")
    assert only(read(folder)).first.remarks == ("packed.dcm is a copy of 002.dcm and was read once",)


def test_files_that_differ_under_one_identifier_are_all_refused(write_series, make):
    folder = write_series(3)
    make.save(make.image(2, position=(-10, -12, -10), pixels=make.pattern(seed=9)), folder / "other.dcm")
    reading = read(folder)
    assert [each.path.name for each in reading.refused] == ["002.dcm", "other.dcm"]
    assert all("share one SOP Instance UID (002.dcm and other.dcm)" in each.reason for each in reading.refused)
    series = reading.acquisitions[0].first
    assert series.pixels.shape[0] == 2
    assert [remark[:49] for remark in series.remarks[1:]] == [
        "002.dcm of its DICOM series was refused: differen",
        "other.dcm of its DICOM series was refused: differ",
    ]


def test_geometries_of_one_series_are_kept_apart_and_named(tmp_path, make):
    for number in (1, 2, 3):
        make.save(make.image(number, position=(-10, -12, 10 * number)), tmp_path / f"axial{number}.dcm")
    make.save(make.image(9, ImageOrientationPatient=[0, 1, 0, 0, 0, -1]), tmp_path / "stray.dcm")
    axial, stray = sorted(read(tmp_path).acquisitions, key=lambda each: -len(each.planes))
    expected = (
        "its DICOM series holds images of 2 geometries, kept apart: "
        "3 of 24 x 20 (axial1.dcm, axial2.dcm, axial3.dcm); 1 of 24 x 20 (stray.dcm)"
    )
    assert axial.first.remarks == stray.first.remarks == (expected,)
    assert (axial.pixels.shape[0], stray.pixels.shape[0]) == (3, 1)


def test_a_series_names_its_refused_files(write_series):
    folder = write_series(4)
    cut = folder / "002.dcm"
    cut.write_bytes(cut.read_bytes()[:-100])
    reading = read(folder)
    assert [each.path.name for each in reading.refused] == ["002.dcm"]
    first, second = reading.acquisitions[0].first.remarks
    assert first.startswith("1 slice is missing between slice 1 (at -20.0 mm) and slice 2 (at 0.0 mm)")
    assert second == "002.dcm of its DICOM series was refused: the pixel data are cut short: 860 of 960 bytes"


@pytest.mark.parametrize(("written", "mhz"), [(63.866, 63.866), (63866000.0, 63.866), (123.2e6, 123.2), (0, None), (-5, None)])
def test_frequency_is_in_mhz_whatever_the_file_used(tmp_path, make, written, mhz):
    make.save(make.image(ImagingFrequency=written), tmp_path / "a.dcm")
    assert only(read(tmp_path)).settings.frequency_MHz == (None if mhz is None else pytest.approx(mhz))


@pytest.mark.parametrize(
    ("where", "value", "expected"),
    [
        ((0x0051, "SIEMENS MR HEADER", 0x11), "p2", True),
        ((0x0021, "SIEMENS MR SDI 02", 0x56), "p2 s3", True),
        ((0x0051, "SIEMENS MR HEADER", 0x11), "p1", False),
        ((0x0051, "SOMEONE ELSE", 0x11), "p2", None),
    ],
)
def test_parallel_imaging_is_read_from_private_elements(tmp_path, make, where, value, expected):
    group, creator, offset = where
    image = make.image()
    image.private_block(group, creator, create=True).add_new(offset, "LO", value)
    make.save(image, tmp_path / "a.dcm")
    assert only(read(tmp_path)).settings.parallel_imaging is expected


def test_coil_elements_part_series_that_name_no_coil(tmp_path, make):
    for series, elements in [(1, "BC"), (2, "HE3,4;NE1,2")]:
        image = make.image(1, series, ReceiveCoilName=None, Manufacturer="SIEMENS")
        image.private_block(0x0051, "SIEMENS MR HEADER", create=True).add_new(0x0F, "LO", elements)
        make.save(image, tmp_path / f"{series}.dcm")
    reading = read(tmp_path)
    assert [each.settings.receive_coil for each in reading.acquisitions] == ["BC", "HE3,4;NE1,2"]
    assert reading.acquisitions[0].settings.filtered is False


def test_a_normalised_image_is_called_filtered(tmp_path, make):
    make.save(make.image(ImageType=["ORIGINAL", "PRIMARY", "M", "NORM", "ND"]), tmp_path / "a.dcm")
    assert only(read(tmp_path)).settings.filtered is True


def test_names_in_any_script_and_control_characters_are_cleaned(tmp_path, make):
    image = make.image(SeriesDescription="ΚΕΦΑΛΗ 頭", ProtocolName="QA\x1b[31m SE", SpecificCharacterSet="ISO_IR 192")
    make.save(image, tmp_path / "a.dcm")
    series = only(read(tmp_path)).first
    assert series.description == "ΚΕΦΑΛΗ 頭"
    assert series.settings.protocol == "QA [31m SE"
