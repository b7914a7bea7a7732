"""The wheel carries what the clone has: an installed copy finds templates, phantoms, migrations and data files."""

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent

ASK = """
import qa, sys
from pathlib import Path
from qa.phantoms import load_phantom, phantom_names
from qa.resources import shipped_folder
from qa.site import shipped_limits, write_site_template
from qa.store import open_record
where = Path(qa.__file__).resolve().parent
assert where.is_relative_to(sys.argv[1]), where
for name in ("templates", "phantoms"):
    assert shipped_folder(name).is_relative_to(where), shipped_folder(name)
print(len(phantom_names()), len(load_phantom("sectioned-190").sections), len(shipped_limits()) > 5)
write_site_template(Path(sys.argv[2]))
with open_record(Path(sys.argv[2]) / "evenfield.db") as record:
    print(record.head().number)
print(sorted(p.name for p in shipped_folder("templates").iterdir() if p.suffix == ".html") != [])
"""


@pytest.fixture(scope="module")
def installed(tmp_path_factory):
    place = tmp_path_factory.mktemp("wheel")
    subprocess.run(
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(place)],
        cwd=ROOT,
        check=True,
        capture_output=True,
    )
    (wheel,) = place.glob("evenfield-*.whl")
    target = place / "installed"
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(target)
    return target


def test_an_installed_copy_finds_what_it_needs(installed, tmp_path):
    done = subprocess.run(
        [sys.executable, "-P", "-c", ASK, str(installed), str(tmp_path / "department")],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(installed)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == ["5", "6", "True", "0", "True"]


def test_the_clone_finds_its_own():
    from qa.resources import shipped_folder

    assert shipped_folder("phantoms") == ROOT / "phantoms"
    assert shipped_folder("templates") == ROOT / "templates"


def test_a_missing_folder_is_said():
    from qa.resources import shipped_folder

    with pytest.raises(FileNotFoundError, match="install it again"):
        shipped_folder("nothing")
