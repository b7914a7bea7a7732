import os
import socket

import pytest

from qa.dicom import read
from qa.dicom.files import find
from qa.errors import UsageError


def names(found):
    return [each.path.name for each in found]


def reasons(reading):
    return {each.path.name: each.reason for each in reading.refused}


def test_folders_are_searched_recursively_and_hidden_files_left_out(tmp_path):
    for name in ["a/b/one", "a/two.dcm", ".hidden/three.dcm", "a/.four.dcm", "DICOMDIR", "a/README", "five.DCM"]:
        path = tmp_path / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.touch()
    assert names(find(tmp_path)) == ["one", "two.dcm", "five.DCM"]


def test_a_file_reached_twice_is_found_once_and_links_in_a_circle_end(tmp_path):
    folder = tmp_path / "in"
    folder.mkdir()
    (folder / "a.dcm").touch()
    (folder / "again.dcm").symlink_to(folder / "a.dcm")
    (folder / "round").symlink_to(folder, target_is_directory=True)
    (tmp_path / "other").symlink_to(folder, target_is_directory=True)
    assert names(find([tmp_path, folder, folder / "a.dcm"])) == ["a.dcm"]


def test_a_path_that_does_not_exist_is_named(tmp_path):
    missing = tmp_path / "nowhere"
    with pytest.raises(UsageError, match=f"{missing} does not exist"):
        read(missing)
    with pytest.raises(UsageError, match="nowhere does not exist"):
        read([tmp_path, str(missing)])


def test_a_path_that_no_system_could_have_is_said_not_to_exist():
    with pytest.raises(UsageError, match="does not exist"):
        read("no\0such")


def test_an_empty_folder_is_read_as_nothing(tmp_path):
    reading = read(tmp_path)
    assert reading.acquisitions == ()
    assert reading.refused == ()


def test_what_is_no_dicom_is_refused_or_passed_over(tmp_path):
    (tmp_path / "text.dcm").write_text("this is a note, not an image. " * 20)
    (tmp_path / "noname").write_bytes(b"\x7fELF" + bytes(400))
    (tmp_path / "short.ima").write_text("x")
    (tmp_path / "empty.dcm").touch()
    for name in ["truth.json", "notes.txt", "table.csv", "read.me.md", "scan.pdf", "empty.txt"]:
        (tmp_path / name).write_text("" if "empty" in name else "{}")
    assert reasons(read(tmp_path)) == {
        "text.dcm": "not a DICOM file",
        "noname": "not a DICOM file",
        "short.ima": "not a DICOM file",
        "empty.dcm": "the file is empty",
    }


def test_a_side_file_that_is_asked_for_is_refused_aloud(tmp_path):
    note = tmp_path / "notes.txt"
    note.write_text("hello")
    assert reasons(read(note)) == {"notes.txt": "not a DICOM file"}


def test_a_dicom_file_need_not_end_in_dcm(tmp_path, make):
    make.save(make.image(1), tmp_path / "IM0001")
    make.save(make.image(2, position=(-10, -12, 10)), tmp_path / "named.txt")
    reading = read(tmp_path)
    assert reading.refused == ()
    assert len(reading.acquisitions[0].planes) == 2


def test_a_data_set_without_preamble_is_read(tmp_path, make):
    whole = make.save(make.image(), tmp_path / "a.dcm").read_bytes()
    (tmp_path / "bare.dcm").write_bytes(whole[132:])
    (tmp_path / "a.dcm").unlink()
    assert read(tmp_path).acquisitions[0].pixels.shape == (1, 24, 20)


def test_a_directory_object_is_passed_over_under_any_name(tmp_path, make):
    directory = make.image()
    directory.file_meta.MediaStorageSOPClassUID = directory.SOPClassUID = "1.2.840.10008.1.3.10"
    path = make.save(directory, tmp_path / "index.dcm")
    assert read(tmp_path).refused == ()
    assert len(read(path).refused) == 1


def test_what_could_hang_or_cannot_be_opened_is_refused(tmp_path):
    os.mkfifo(tmp_path / "pipe.dcm")
    (tmp_path / "broken.dcm").symlink_to(tmp_path / "gone")
    server = socket.socket(socket.AF_UNIX)
    server.bind(str(tmp_path / "sock.dcm"))
    with server:
        found = reasons(read(tmp_path))
    assert found == {
        "pipe.dcm": "not a regular file",
        "sock.dcm": "not a regular file",
        "broken.dcm": "the link leads nowhere, or the file has gone",
    }


@pytest.mark.skipif(os.geteuid() == 0, reason="the administrator may read everything")
def test_a_file_without_read_permission_is_refused(tmp_path):
    path = tmp_path / "locked.dcm"
    path.write_bytes(b"x" * 200)
    path.chmod(0)
    assert "permission" in reasons(read(tmp_path))["locked.dcm"]


def test_a_sparse_giant_is_refused_unread(tmp_path):
    with (tmp_path / "giant.dcm").open("wb") as stream:
        stream.truncate(2**31 + 1)
    assert reasons(read(tmp_path)) == {"giant.dcm": "larger than 2 GiB: too large for a phantom series"}


def test_progress_counts_every_file(write_series):
    folder = write_series(3)
    (folder / "bad.dcm").write_text("no")
    told = []
    read(folder, progress=lambda done, of: told.append((done, of)))
    assert told == [(1, 4), (2, 4), (3, 4), (4, 4)]
