"""What holds for any order of files and any damage to them."""

import shutil

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from pydicom.uid import ExplicitVRBigEndian, ExplicitVRLittleEndian, ImplicitVRLittleEndian, RLELossless

from qa.dicom import read
from qa.dicom.reading import UNFORESEEN

RELAXED = [HealthCheck.function_scoped_fixture, HealthCheck.too_slow]


def facts(reading):
    """All of a reading but the names of files."""
    return [
        [
            (s.series_instance_uid, s.kind, s.temporal_position, s.acquired_at, s.settings, s.planes, s.pixels.tobytes(),
             [f.sop_instance_uid for f in s.files])
            for s in acquisition.repeats
        ]
        for acquisition in reading.acquisitions
    ]  # fmt: skip


@pytest.fixture(scope="module")
def department(tmp_path_factory):
    """Two repeats with two echoes and two time points each, as files of any name."""
    return tmp_path_factory.mktemp("department")


@settings(max_examples=15, deadline=None, suppress_health_check=RELAXED)
@given(order=st.permutations(range(24)))
def test_names_and_order_of_files_do_not_matter(department, make, order):
    if not (department / "ordered").exists():
        number = 0
        for series in (1, 2):
            for echo in (5, 10):
                for point in (1, 2):
                    for slice_ in range(3):
                        image = make.image(
                            number + 1, series, (-10, -12, 10 * slice_), EchoTime=echo, TemporalPositionIdentifier=point
                        )
                        make.save(image, department / "ordered" / f"{number:02d}.dcm")
                        number += 1
    shuffled = department / "shuffled"
    shutil.rmtree(shuffled, ignore_errors=True)
    shuffled.mkdir()
    for number, place in enumerate(order):
        shutil.copy(department / "ordered" / f"{number:02d}.dcm", shuffled / f"{place:02d}.dcm")
    expected = facts(read(department / "ordered"))
    assert [len(acquisition) for acquisition in expected] == [4, 4]
    assert facts(read(shuffled)) == expected
    assert facts(read([shuffled / f"{place:02d}.dcm" for place in order])) == expected


@pytest.fixture(scope="module")
def bases():
    """Bytes of small valid files, made once."""
    return {}


edits = st.lists(
    st.tuples(
        st.sampled_from(["flip", "set", "cut", "delete", "insert", "repeat", "length"]),
        st.floats(0, 1, exclude_max=True),
        st.binary(min_size=1, max_size=8),
    ),
    min_size=1,
    max_size=6,
)


def damaged(content, wounds):
    raw = bytearray(content)
    for kind, share, patch in wounds:
        at = int(share * len(raw))
        if kind == "flip" and raw:
            raw[at] ^= patch[0] or 1
        elif kind == "set":
            raw[at : at + len(patch)] = patch
        elif kind == "cut" and share > 0.5:
            del raw[at:]
        elif kind == "delete":
            del raw[at : at + len(patch)]
        elif kind == "insert":
            raw[at:at] = patch
        elif kind == "repeat":
            raw[at:at] = raw[at : at + 8 * len(patch)]
        elif kind == "length":
            raw[at : at + 4] = b"\xff\xff\xff\xff" if patch[0] % 2 else b"\0\0\0\0"
    return bytes(raw)


@settings(max_examples=250, deadline=None, suppress_health_check=RELAXED)
@given(which=st.sampled_from(["explicit", "implicit", "big", "rle", "enhanced", "mosaic"]), wounds=edits)
def test_no_damage_raises_or_names_anyone(tmp_path_factory, bases, make, which, wounds):
    if not bases:
        folder = tmp_path_factory.mktemp("bases")
        for name, syntax in [
            ("explicit", ExplicitVRLittleEndian),
            ("implicit", ImplicitVRLittleEndian),
            ("big", ExplicitVRBigEndian),
        ]:
            image = make.image(PatientName="Weatherby^Anneliese", PatientID="4471902", PatientBirthDate="19570312")
            bases[name] = make.save(image, folder / name, syntax).read_bytes()
        image = make.image()
        image.compress(RLELossless, encoding_plugin="pydicom")
        bases["rle"] = make.save(image, folder / "rle").read_bytes()
        places = [(-10, -12, 10 * k) for k in range(3)]
        bases["enhanced"] = make.save(make.enhanced(places, make.pattern((3, 6, 5))), folder / "enhanced").read_bytes()
        bases["mosaic"] = make.save(make.mosaic(make.pattern((4, 6, 5))), folder / "mosaic").read_bytes()
        bases["folder"] = folder
    path = bases["folder"] / "damaged.dcm"
    path.write_bytes(damaged(bases[which], wounds))
    reading = read(path)
    said = " ".join(each.reason for each in reading.refused)
    assert UNFORESEEN not in said
    for acquisition in reading.acquisitions:
        assert np.all(np.isfinite(acquisition.pixels))
        assert all(np.all(np.isfinite(plane.axes)) for plane in acquisition.planes)
        said += repr(acquisition.settings) + acquisition.first.description + " ".join(acquisition.first.remarks)
    assert not any(secret in said for secret in ("Weatherby", "Anneliese", "4471902", "19570312"))
