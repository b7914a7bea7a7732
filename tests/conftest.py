"""What the tests of several rooms share: the program run in this process, and digital scans as a technologist sends them."""

import sys
from pathlib import Path

import pytest

SHARED = Path(__file__).resolve().parent.parent.parent / "shared" / "data"


@pytest.fixture
def evenfield(capsys, monkeypatch):
    """Run the program: `evenfield(words...) -> (exit status, standard output, standard error)`."""
    from qa.cli import main

    monkeypatch.delenv("EVENFIELD_SITE", raising=False)
    monkeypatch.delenv("EVENFIELD_TRACEBACK", raising=False)

    def run(*words):
        capsys.readouterr()
        monkeypatch.setattr(sys, "argv", ["evenfield", *map(str, words)])
        status = 0
        try:
            main()
        except SystemExit as end:
            status = end.code or 0
        out, err = capsys.readouterr()
        return status, out, err

    return run


@pytest.fixture(scope="session")
def scans(tmp_path_factory):
    """Write digital scans once a session: `scans(name="sphere-170", **changes) -> folder`."""
    from qa.phantoms import load_phantom
    from qa.simulate import default_setup, write_dicom

    made = {}

    def make(name="sphere-170", **changes):
        key = (name, repr(sorted(changes.items())))
        if key not in made:
            folder = tmp_path_factory.mktemp("scan")
            changes = {"patient_id": f"QA-{name}", "seed": 11} | changes
            write_dicom(default_setup(load_phantom(name), **changes), folder)
            made[key] = folder
        return made[key]

    return make
