import errno
import os
import threading
from datetime import date

import pytest

from qa.errors import FaultError
from qa.report.files import save_report

DAY = date(2026, 11, 23)


def test_reports_are_filed_by_year_scanner_and_day(tmp_path):
    path = save_report(tmp_path / "reports", "north-3t", DAY, b"%PDF-1")
    assert path == tmp_path / "reports" / "2026" / "north-3t_2026-11-23.pdf"
    assert path.read_bytes() == b"%PDF-1"


def test_a_second_report_of_a_day_gets_a_number_and_the_first_stays(tmp_path):
    paths = [save_report(tmp_path, "north-3t", DAY, f"{n}".encode()) for n in range(3)]
    assert [p.name for p in paths] == ["north-3t_2026-11-23.pdf", "north-3t_2026-11-23_2.pdf", "north-3t_2026-11-23_3.pdf"]
    assert [p.read_bytes() for p in paths] == [b"0", b"1", b"2"]
    assert sorted((tmp_path / "2026").iterdir()) == sorted(paths)


def test_many_at_once_never_share_a_name(tmp_path):
    done = []
    threads = [
        threading.Thread(target=lambda n=n: done.append((n, save_report(tmp_path, "n", DAY, str(n).encode()))))
        for n in range(12)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len({path for _, path in done}) == 12
    assert all(path.read_bytes() == str(n).encode() for n, path in done)


def test_file_systems_without_hard_links_are_served(tmp_path, monkeypatch):
    def refuse(*_args, **_options):
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(os, "link", refuse)
    first, second = (save_report(tmp_path, "n", DAY, content) for content in (b"a", b"b"))
    assert (first.read_bytes(), second.read_bytes()) == (b"a", b"b")
    assert len(list((tmp_path / "2026").iterdir())) == 2


@pytest.mark.parametrize(
    "name", ["../../etc/x", "a/b", "..", "con:1", "\x00", "Βορράς", "北 3T", "n" * 500, "北" * 500, ".hidden"]
)
def test_no_name_leaves_the_folder(tmp_path, name):
    path = save_report(tmp_path / "reports", name, DAY, b"x")
    assert path.resolve().parent == (tmp_path / "reports" / "2026").resolve()
    assert not path.name.startswith(".")


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.ENOSPC, "the disk is full"),
        (errno.EACCES, "no permission"),
        (errno.EROFS, "read-only"),
        (errno.EIO, "the system says"),
    ],
)
def test_a_failing_disk_is_one_sentence_and_leaves_nothing(tmp_path, monkeypatch, number, words):
    def fail(_handle):
        raise OSError(number, "trouble")

    monkeypatch.setattr(os, "fsync", fail)
    with pytest.raises(FaultError, match=words) as caught:
        save_report(tmp_path, "north-3t", DAY, b"x")
    assert "north-3t_2026-11-23.pdf" in str(caught.value)
    assert list((tmp_path / "2026").iterdir()) == []


def test_a_file_where_the_folder_should_be_is_said(tmp_path):
    (tmp_path / "reports").write_text("not a folder")
    with pytest.raises(FaultError, match="a file"):
        save_report(tmp_path / "reports", "north-3t", DAY, b"x")


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_without_write_permission_is_said(tmp_path):
    tmp_path.chmod(0o500)
    with pytest.raises(FaultError, match="no permission"):
        save_report(tmp_path, "north-3t", DAY, b"x")
