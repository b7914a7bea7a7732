"""`from qa import read, measure` is a promise, kept whatever was imported before."""

import importlib
import subprocess
import sys

import pytest

ORDERS = [
    "from qa import read, measure",
    "import qa.measure\nfrom qa import read, measure",
    "from qa.measure import ROUTINES\nimport qa\nread, measure = qa.read, qa.measure",
    "import qa.measure.snr, importlib\nimportlib.import_module('qa.measure')\nfrom qa import measure, read",
]


@pytest.mark.parametrize("order", ORDERS)
def test_measure_is_the_function_in_any_order(order):
    done = subprocess.run(
        [sys.executable, "-c", f"{order}\nprint(type(measure).__name__, type(read).__name__)"],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.stdout.split() == ["function", "function"], done.stderr


def test_the_room_stays_importable():
    room = importlib.import_module("qa.measure")
    assert room.ROUTINES
    assert importlib.import_module("qa.measure.snr").__name__ == "qa.measure.snr"


def test_what_is_exported_is_what_is_named():
    import qa

    assert sorted(qa.__all__) == ["__version__", "measure", "read"]
    assert all(hasattr(qa, name) for name in qa.__all__)


def test_same_figures_as_the_command(tmp_path):
    import json

    from qa import measure, read
    from qa.phantoms import load_phantom
    from qa.simulate import default_setup, write_dicom

    write_dicom(default_setup(load_phantom("sphere-170"), seed=5), tmp_path / "scan")
    (outcome,) = measure(read(tmp_path / "scan"), phantom="sphere-170")
    done = subprocess.run(
        [sys.executable, "-m", "qa.cli", "measure", str(tmp_path / "scan"), "--phantom", "sphere-170", "--json"],
        capture_output=True,
        text=True,
        check=True,
    )
    (printed,) = json.loads(done.stdout)["acquisitions"]
    assert {m["quantity"]: m["value"] for m in printed["measurements"]} == {m.quantity: m.value for m in outcome.measurements}
    assert len(outcome.measurements) >= 10
