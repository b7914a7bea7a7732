"""Enhanced objects and mosaics."""

import numpy as np
import pytest

from qa.dicom import read
from qa.dicom.mosaic import text_fields

PLACES = [(-10.0, -12.0, 20.0), (-10.0, -12.0, 0.0), (-10.0, -12.0, 10.0)]


def only(reading):
    assert reading.refused == ()
    (acquisition,) = reading.acquisitions
    return acquisition


def test_an_enhanced_object_gives_what_classic_files_would(tmp_path, make):
    pixels = make.pattern((3, 24, 20), high=1000)
    make.save(make.enhanced(PLACES, pixels), tmp_path / "e.dcm")
    series = only(read(tmp_path)).first
    order = [1, 2, 0]  # by position
    assert [plane.position_patient[2] for plane in series.planes] == [0, 10, 20]
    for image, frame in zip(series.pixels, order, strict=True):
        np.testing.assert_array_equal(image, pixels[frame] * np.float32(1 + frame))  # each frame has its own slope
    settings = series.settings
    assert (settings.echo_ms, settings.repetition_ms, settings.flip_deg, settings.averages) == (20, 500, 90, 1)
    assert (settings.slice_thickness_mm, settings.slice_spacing_mm, settings.pixel_mm) == (5, 10, (1.25, 1.0))
    assert (settings.phase_encode, settings.frequency_MHz, settings.receive_coil) == ("column", 127.732, "HEAD")
    assert (settings.parallel_imaging, settings.bandwidth_hz_per_pixel, settings.sequence) == (False, 150, "se")
    assert series.acquired_at.isoformat() == "2026-11-23T07:42:01"
    assert [each.path.name for each in series.files] == ["e.dcm"]


def test_temporal_positions_echoes_and_components_of_one_object_are_told_apart(tmp_path, make):
    places = [(-10.0, -12.0, 10.0 * slice_) for _ in range(8) for slice_ in range(2)]
    temporal = [1] * 8 + [2] * 8
    echoes = ([5.0] * 4 + [10.0] * 4) * 2
    components = (["MAGNITUDE"] * 2 + ["PHASE"] * 2) * 4
    pixels = make.pattern((16, 6, 5))
    make.save(make.enhanced(places, pixels, temporal=temporal, echoes=echoes, components=components), tmp_path / "e.dcm")
    reading = read(tmp_path)
    assert reading.refused == ()
    found = {(a.first.kind, a.settings.echo_ms): [s.temporal_position for s in a.repeats] for a in reading.acquisitions}
    assert found == {(kind, echo): [1, 2] for kind in ("magnitude", "phase") for echo in (5.0, 10.0)}
    late_phase = next(a for a in reading.acquisitions if (a.first.kind, a.settings.echo_ms) == ("phase", 10.0)).repeats[1]
    np.testing.assert_array_equal(late_phase.pixels[0], pixels[14] * np.float32(15))


def test_a_frame_without_position_is_named(tmp_path, make):
    dataset = make.enhanced(PLACES, make.pattern((3, 24, 20)))
    del dataset.PerFrameFunctionalGroupsSequence[1].PlanePositionSequence
    make.save(dataset, tmp_path / "e.dcm")
    (refused,) = read(tmp_path).refused
    assert refused.reason == "frame 2: Image Position (Patient) is missing: where the image lies is not known"


def test_groups_that_do_not_match_the_frames_are_refused(tmp_path, make):
    dataset = make.enhanced(PLACES, make.pattern((3, 24, 20)))
    del dataset.PerFrameFunctionalGroupsSequence[2]
    make.save(dataset, tmp_path / "e.dcm")
    assert read(tmp_path).refused[0].reason == "it has 3 frames but functional groups for 2"


def test_several_frames_without_functional_groups_are_refused(tmp_path, make):
    make.save(make.image(pixels=make.pattern((2, 24, 20)), NumberOfFrames=2), tmp_path / "a.dcm")
    assert read(tmp_path).refused[0].reason == "it holds several frames but does not say where each lies"


@pytest.mark.parametrize("count", [1, 2, 4, 5, 9, 10])
@pytest.mark.parametrize("where", ["tag", "text"])
def test_a_mosaic_is_cut_into_its_slices(tmp_path, make, count, where):
    tiles = make.pattern((count, 8, 10))
    make.save(make.mosaic(tiles, count_in=where), tmp_path / "m.dcm")
    series = only(read(tmp_path)).first
    np.testing.assert_array_equal(series.pixels, tiles)
    assert [plane.position_patient for plane in series.planes] == [(-10, -12, -20 + 10 * k) for k in range(count)]
    assert series.settings.matrix == (8, 10)
    assert series.remarks == ()


def test_slices_of_a_mosaic_that_run_against_the_normal_are_put_in_order(tmp_path, make):
    tiles = make.pattern((3, 8, 10))
    make.save(make.mosaic(tiles, normal=(0, 0, -1)), tmp_path / "m.dcm")
    series = only(read(tmp_path)).first
    np.testing.assert_array_equal(series.pixels, tiles[::-1])
    assert [plane.position_patient[2] for plane in series.planes] == [-40, -30, -20]


def test_a_mosaic_without_a_direction_says_so(tmp_path, make):
    dataset = make.mosaic(make.pattern((3, 8, 10)))
    del dataset[0x0029, 0x1010]
    make.save(dataset, tmp_path / "m.dcm")
    assert "does not say in which direction" in only(read(tmp_path)).first.remarks[0]


def test_time_points_of_a_mosaic_series_are_repeats_and_reversed_phase_encoding_is_none(tmp_path, make):
    for series, sense in [(1, "1"), (2, "0")]:
        for point in (1, 2):
            tiles = make.pattern((4, 8, 10), seed=10 * series + point)
            dataset = make.mosaic(tiles, number=point, series=series)
            dataset.AcquisitionNumber = point
            raw = dataset[0x0029, 0x1010].value
            at = raw.index(b"PhaseEncodingDirectionPositive")
            dataset[0x0029, 0x1010].value = raw[:at] + raw[at:].replace(b"1\0", sense.encode() + b"\0")
            make.save(dataset, tmp_path / f"{series}{point}.dcm")
    reading = read(tmp_path)
    assert [[each.temporal_position for each in a.repeats] for a in reading.acquisitions] == [[1, 2], [1, 2]]


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        (lambda d: d.__delitem__((0x0019, 0x100A)), "it is a mosaic that does not say how many slices it holds"),
        (lambda d: d.__delitem__("SpacingBetweenSlices"), "it is a mosaic without a usable Spacing Between Slices"),
        (lambda d: d.__setattr__("SpacingBetweenSlices", "1e308"), "it is a mosaic without a usable Spacing Between Slices"),
        (lambda d: d[0x0019, 0x100A].__setattr__("value", 50), "it is a mosaic of 50 slices whose size is not a multiple"),
        (lambda d: d[0x0019, 0x100A].__setattr__("value", 60000), "it is a mosaic that does not say how many slices it holds"),
    ],
)
def test_a_mosaic_that_cannot_be_cut_is_refused(tmp_path, make, change, reason):
    dataset = make.mosaic(make.pattern((4, 8, 10)))
    change(dataset)
    make.save(dataset, tmp_path / "m.dcm")
    assert read(tmp_path).refused[0].reason.startswith(reason)


def test_text_headers_cut_anywhere_give_what_is_whole(make):
    dataset = make.mosaic(make.pattern((4, 8, 10)))
    raw = dataset[0x0029, 0x1010].value
    whole = text_fields(raw)
    assert whole == {
        "SliceNormalVector": ("0.00000000", "0.00000000", "1.00000000"),
        "PhaseEncodingDirectionPositive": ("1",),
    }
    for end in range(len(raw)):
        assert text_fields(raw[:end]).items() <= whole.items()
    assert text_fields(b"") == {}


def test_a_legacy_converted_object_keeps_its_settings_in_unassigned_attributes(tmp_path, make):
    """PS3.3, C.7.6.16.2.25: what a classic image said and no functional group holds stands there as it was."""
    dataset = make.enhanced(PLACES, make.pattern((3, 24, 20)))
    dataset.SOPClassUID = dataset.file_meta.MediaStorageSOPClassUID = "1.2.840.10008.5.1.4.1.1.4.4"
    shared = dataset.SharedFunctionalGroupsSequence[0]
    del shared.MRTimingAndRelatedParametersSequence, shared.MRFOVGeometrySequence
    rest = make.item(RepetitionTime=750, FlipAngle=60, InPlanePhaseEncodingDirection="ROW")
    shared.UnassignedSharedConvertedAttributesSequence = [rest]
    for number, group in enumerate(dataset.PerFrameFunctionalGroupsSequence):
        del group.MREchoSequence, group.MRImageFrameTypeSequence
        group.UnassignedPerFrameConvertedAttributesSequence = [make.item(EchoTime=30, InstanceNumber=number)]
    dataset.ImageType = ["ORIGINAL", "PRIMARY", "M", "ND"]
    make.save(dataset, tmp_path / "legacy.dcm")
    settings = only(read(tmp_path)).settings
    assert (settings.repetition_ms, settings.flip_deg, settings.echo_ms, settings.phase_encode) == (750, 60, 30, "row")
