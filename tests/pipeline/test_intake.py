"""Taking in: nothing is lost by a crash between two steps, nothing is taken in twice, nobody runs beside another."""

import shutil
from datetime import UTC, datetime

import pytest

from qa.errors import FaultError
from qa.pipeline import open_department, take_in
from qa.site import write_site_template

NOW = datetime(2026, 11, 23, 18, 0, tzinfo=UTC)


@pytest.fixture
def department(tmp_path):
    place = tmp_path / "department"
    write_site_template(place)
    path = place / "site.toml"
    path.write_text(path.read_text("utf-8").replace("pixel_mm = 0.98", "pixel_mm = 1.0"), encoding="utf-8")
    return place


def _send(folder, department, name="scan"):
    shutil.copytree(folder, department / "inbox" / name)


def _files(folder):
    return sorted(p for p in folder.rglob("*.dcm"))


class _PowerCutError(Exception):
    """Stands for a power cut."""


@pytest.mark.parametrize("step", ["store_all", "release"])
def test_a_crash_between_two_steps_loses_nothing(department, scans, monkeypatch, step):
    from qa.store import Record, archive

    _send(scans(), department)

    def stop(*_args, **_words):
        raise _PowerCutError

    with monkeypatch.context() as patch:
        patch.setattr(Record if step == "store_all" else archive, step, stop)
        with pytest.raises(_PowerCutError), open_department(department, NOW) as opened:
            take_in(opened)
    assert len(_files(department / "inbox")) == 2
    assert len(_files(department / "archive")) == 2
    with open_department(department, NOW) as opened:
        again = take_in(opened)
        (session,) = opened.record.sessions("north-3t")
    assert (len(again.taken), again.skipped) == ((1, 0) if step == "store_all" else (0, 2))
    assert len(session.acquisitions) == 1
    assert _files(department / "inbox") == []
    assert len(_files(department / "archive")) == 2


def test_two_runs_never_at_once(department, scans):
    from qa.store import run_lock

    _send(scans(), department)
    with run_lock(department, NOW), open_department(department, NOW) as opened, pytest.raises(FaultError, match="another run"):
        take_in(opened)
    assert len(_files(department / "inbox")) == 2


def test_another_file_under_the_same_name_is_kept_beside(department, scans):
    from qa.dicom import read
    from qa.store.archive import archive_path, file_away

    (acquisition,) = read(scans()).acquisitions
    first = acquisition.first
    file = first.files[0]
    target = archive_path(department / "archive", "north-3t", NOW.date(), first.series_instance_uid, file)
    target.parent.mkdir(parents=True)
    target.write_bytes(b"something else")
    kept = file_away(file, target, move=False)
    assert target.read_bytes() == b"something else"
    assert kept != target
    assert kept.read_bytes() == file.path.read_bytes()


def test_a_file_that_changes_while_it_is_read_stays(scans, tmp_path):
    from dataclasses import replace

    from qa.dicom import read
    from qa.store.archive import file_away

    (acquisition,) = read(scans()).acquisitions
    file = replace(acquisition.first.files[0], sha256="0" * 64)
    with pytest.raises(FaultError, match="changed while"):
        file_away(file, tmp_path / "x.dcm", move=True)
    assert file.path.exists()


def test_figures_in_the_record_are_those_measured(department, scans):
    _send(scans(), department)
    with open_department(department, NOW) as opened:
        (taken,) = take_in(opened).taken
        (session,) = opened.record.sessions("north-3t")
    (recorded,) = session.acquisitions
    assert [j.measurement for j in recorded.judged] == list(taken.outcome.measurements)
    assert [j.verdict for j in recorded.judged] == list(taken.verdicts)
    assert recorded.phantom_sha256 == opened.site.phantoms["sphere-170"].sha256


def test_the_picture_comes_back_from_the_archive(department, scans):
    import numpy as np

    from qa.pipeline.pictures import picture_of, pictures_of

    _send(scans(), department)
    with open_department(department, NOW) as opened:
        (taken,) = take_in(opened).taken
        (session,) = opened.record.sessions("north-3t")
        (picture,) = pictures_of(opened, session.acquisitions[0])
        ghost = picture_of(opened, session.acquisitions[0], "ghosting")
    assert np.array_equal(picture.pixels, taken.outcome.acquisition.pixels[0])
    assert len(ghost.regions) == 5
    assert set(ghost.regions) <= set(picture.regions)


def test_what_is_no_plain_file_stays_and_stops_nothing(department, scans):
    import os

    _send(scans(), department)
    os.mkfifo(department / "inbox" / "pipe.dcm")
    (department / "inbox" / "link.dcm").symlink_to(department / "nowhere")
    (department / "inbox" / "circle").symlink_to(department / "inbox")
    (department / "inbox" / "folder.dcm").mkdir()
    with open_department(department, NOW) as opened:
        intake = take_in(opened)
        kept = [refusal.path for refusal in opened.record.refusals()]
    assert len(intake.taken) == 1
    assert {one.path.name for one in intake.refused} <= {"pipe.dcm", "link.dcm"}
    assert intake.refused
    assert set(kept) == {"still in the inbox"}
    assert {p.name for p in (department / "inbox").iterdir()} == {"pipe.dcm", "link.dcm", "circle"}
