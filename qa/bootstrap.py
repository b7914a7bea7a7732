#!/usr/bin/env python3
"""Set the project up and run it, from a bare clone, with Python's standard library alone.

    python3 qa/bootstrap.py                set up only
    python3 qa/bootstrap.py demo [FOLDER]  set up, then build the invented department and its reports
    python3 qa/bootstrap.py test [WORDS]   set up for tests, then lint, type-check and test (WORDS go to pytest instead)

A second call finds everything in place and costs seconds.
"""

import hashlib
import importlib.util
import os
import shutil
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
VENV = ROOT / ".venv"
BIN = VENV / ("Scripts" if os.name == "nt" else "bin")
PYTHON = BIN / ("python.exe" if os.name == "nt" else "python")
OLDEST = (3, 11)

PANGO = ("libpango-1.0-0", "libpangoft2-1.0-0", "libharfbuzz-subset0", "fonts-dejavu-core")
PEERS = {
    "chromium": "chromium",
    "dcmdump": "dcmtk",
    "pdftotext": "poppler-utils",
    "qpdf": "qpdf",
}


def say(text: str) -> None:
    """Tell what is being done; standard output belongs to the command that follows."""
    print(f"bootstrap: {text}", file=sys.stderr, flush=True)


def give_up(text: str) -> None:
    """Stop with a sentence and the exit status of a run that could not finish."""
    say(text)
    raise SystemExit(4)


def run(*command: object, quiet: bool = False) -> bool:
    """Run a command from the project's folder; with `quiet`, show its output only where it fails."""
    words = [str(word) for word in command]
    if not quiet:
        return subprocess.run(words, cwd=ROOT, check=False).returncode == 0
    done = subprocess.run(words, cwd=ROOT, check=False, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True)
    if done.returncode:
        print(done.stdout[-4000:], file=sys.stderr)
    return done.returncode == 0


def wanted_stamp(extra: str) -> str:
    """Fingerprint of everything that decides what is installed."""
    content = (ROOT / "pyproject.toml").read_bytes()
    return hashlib.sha256(content + repr((sys.version_info[:2], str(ROOT), extra)).encode()).hexdigest()


def install_project(extra: str) -> None:
    """Make `.venv` and install the project into it, unless that was done for this pyproject.toml already."""
    stamps = VENV / "evenfield-setup"
    stamp = stamps / (extra or "plain")
    wanted = wanted_stamp(extra)
    if PYTHON.exists() and stamp.exists() and stamp.read_text(encoding="ascii") == wanted:
        return
    if importlib.util.find_spec("venv") is None or importlib.util.find_spec("ensurepip") is None:
        give_up("this Python has no venv module: on Debian and Ubuntu run 'apt-get install python3-venv', then again.")
    if not (PYTHON.exists() and run(PYTHON, "-c", "import pip", quiet=True)):
        say(f"making the virtual environment {VENV.name} with Python {sys.version.split()[0]}")
        if not run(sys.executable, "-I", "-m", "venv", "--clear", VENV, quiet=True):
            give_up(f"{VENV} could not be made: check that the folder can be written to and the disk is not full, then again.")
    what = f".[{extra}]" if extra else "."
    say(f"installing the project and its libraries ({what}); the first time this takes a minute or two")
    if not run(PYTHON, "-m", "pip", "install", "--quiet", "--disable-pip-version-check", "--editable", what, quiet=True):
        give_up(
            "the libraries could not be installed: check the network or the package mirror, then run the same command again."
        )
    stamps.mkdir(exist_ok=True)
    stamp.write_text(wanted, encoding="ascii")


def may_use_apt() -> bool:
    """Tell whether this run has the right, and the means, to install system packages."""
    return shutil.which("apt-get") is not None and hasattr(os, "geteuid") and os.geteuid() == 0


def apt_install(packages: tuple[str, ...], why: str) -> bool:
    """Install Debian packages where this run may; otherwise say exactly what to install."""
    listed = " ".join(packages)
    if not may_use_apt():
        say(f"{why}: ask an administrator for 'apt-get install {listed}' (Debian, Ubuntu) or the same on your system.")
        return False
    say(f"{why}: installing {listed}")
    os.environ["DEBIAN_FRONTEND"] = "noninteractive"
    install = ("apt-get", "install", "--yes", "--quiet", "--no-install-recommends", *packages)
    return run(*install, quiet=True) or (run("apt-get", "update", "--quiet", quiet=True) and run(*install, quiet=True))


def check_pango() -> None:
    """See that Pango loads, the system library that writes the PDF; install it where that is allowed."""
    probe = (PYTHON, "-c", "import weasyprint")
    if subprocess.run(probe, cwd=ROOT, check=False, capture_output=True).returncode == 0:
        return
    if sys.platform == "darwin" and shutil.which("brew"):
        say("the PDF writer needs Pango: installing it with Homebrew")
        run("brew", "install", "--quiet", "pango", quiet=True)
    elif sys.platform in ("darwin", "win32"):
        how = "'brew install pango'" if sys.platform == "darwin" else "Pango from MSYS2 ('pacman -S mingw-w64-x86_64-pango')"
        say(f"the PDF writer needs Pango: install {how}, then run the same command again.")
    else:
        apt_install(PANGO, "the PDF writer needs Pango")
    if not run(*probe, quiet=True):
        give_up("Pango cannot be loaded, and without it no PDF can be written: install what is named above, then again.")


def check_peers() -> None:
    """Find the real programs that the tests compare with; a test whose peer is missing is skipped and says so."""
    missing = tuple(sorted({package for program, package in PEERS.items() if shutil.which(program) is None}))
    if missing and not apt_install(missing, "programs that the tests compare with are missing"):
        say("the tests that need them will be skipped.")


def test(words: list[str]) -> int:
    """Run every check, the tests last; with words, pytest alone on them."""
    pytest = (PYTHON, "-m", "pytest")
    if words:
        return subprocess.run([*pytest, *words], cwd=ROOT, check=False).returncode
    checks = (
        ("lint", (PYTHON, "-m", "ruff", "check", ".")),
        ("format", (PYTHON, "-m", "ruff", "format", "--check", ".")),
        ("types", (PYTHON, "-m", "mypy")),
        ("layers", (BIN / "lint-imports",)),
        ("tests", (*pytest, "-n", str(min(8, os.cpu_count() or 1)))),
    )
    failed = []
    for name, command in checks:
        say(f"checking {name}")
        if not run(*command):
            failed.append(name)
    if failed:
        say(f"failed: {', '.join(failed)}")
    return 1 if failed else 0


def main(words: list[str]) -> int:
    """Read the command line; return the exit status."""
    if sys.version_info[:2] < OLDEST:
        give_up(
            f"Python {OLDEST[0]}.{OLDEST[1]} or newer is needed, this is {sys.version.split()[0]}: run it with a newer one."
        )
    task, rest = (words[0], words[1:]) if words else ("", [])
    if task not in ("", "demo", "test"):
        print(__doc__, file=sys.stderr)
        say(f"{task!r} is not one of its words: demo, test, or none.")
        return 2
    install_project("test" if task == "test" else "")
    check_pango()
    if task == "test":
        check_peers()
        return test(rest)
    if task == "demo":
        return subprocess.run([str(PYTHON), "-m", "qa.cli", "demo", *rest], check=False).returncode
    say(f"ready: {BIN.relative_to(ROOT) / 'evenfield'} --help")
    return 0


if __name__ == "__main__":
    # Run as a script, the folder qa/ heads the module path and its site.py would hide the standard library's.
    sys.path[:] = [entry for entry in sys.path if Path(entry or ".").resolve() != ROOT / "qa"]
    raise SystemExit(main(sys.argv[1:]))
