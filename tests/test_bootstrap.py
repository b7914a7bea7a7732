"""The set-up script: what it says, and that a second call does nothing slow. It is tried whole on a fresh clone elsewhere."""

import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
SCRIPT = ROOT / "qa" / "bootstrap.py"


def _load():
    from importlib.util import module_from_spec, spec_from_file_location

    spec = spec_from_file_location("bootstrap_under_test", SCRIPT)
    module = module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_it_needs_the_standard_library_alone():
    import ast

    tree = ast.parse(SCRIPT.read_text("utf-8"))
    names = {alias.name.partition(".")[0] for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names}
    names |= {node.module.partition(".")[0] for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)}
    assert names
    assert names <= sys.stdlib_module_names


def test_an_unknown_word_is_refused():
    done = subprocess.run([sys.executable, str(SCRIPT), "dance"], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert "'dance' is not one of its words" in done.stderr
    assert done.stdout == ""


def test_without_the_right_it_says_what_to_install(monkeypatch, capsys):
    bootstrap = _load()
    monkeypatch.setattr(bootstrap, "may_use_apt", lambda: False)
    monkeypatch.setattr(bootstrap.shutil, "which", lambda _: None)
    bootstrap.check_peers()
    said = capsys.readouterr().err
    for package in ("chromium", "dcmtk", "poppler-utils", "qpdf"):
        assert package in said
    assert "apt-get install" in said


def test_the_stamp_follows_pyproject(monkeypatch, tmp_path):
    bootstrap = _load()
    monkeypatch.setattr(bootstrap, "ROOT", tmp_path)
    (tmp_path / "pyproject.toml").write_text("a = 1")
    one, other = bootstrap.wanted_stamp("test"), bootstrap.wanted_stamp("")
    (tmp_path / "pyproject.toml").write_text("a = 2")
    assert len({one, other, bootstrap.wanted_stamp("test")}) == 3


def test_continuous_integration_runs_the_documented_command():
    lines = (ROOT / ".ci" / "run").read_text("utf-8").splitlines()
    assert lines[-1] == "exec python3 qa/bootstrap.py test"
    assert "python3 qa/bootstrap.py test" in (ROOT / "README.md").read_text("utf-8")
