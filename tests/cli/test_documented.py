"""What README says the program does, it does: every command named there exists, and every command there is, is named."""

import re
from pathlib import Path

import pytest

README = (Path(__file__).resolve().parents[2] / "README.md").read_text("utf-8")


def _commands(app, before=()):
    for info in app.registered_commands:
        yield (*before, info.name or info.callback.__name__)
    for group in app.registered_groups:
        yield from _commands(group.typer_instance, (*before, group.name))


def _documented():
    for line in re.findall(r"`evenfield ([^`]+)`", README):
        words = line.split()
        if len(words) > 1 and words[0] in {"limits", "baseline", "event", "record"}:
            rest = " ".join(words[1:]).split(" / ")
            yield from ((words[0], one.split()[0]) for one in rest)
        else:
            yield (words[0],)


def test_readme_and_program_agree():
    from qa.cli import app

    assert set(_documented()) == set(_commands(app))


@pytest.mark.parametrize("status", range(5))
def test_exit_statuses_are_those_of_the_table(status):
    from qa.errors import ExitStatus

    assert ExitStatus(status) == status
    assert re.search(rf"^\| {status} \|", README, re.MULTILINE)


def test_every_error_carries_its_status():
    from qa import errors

    expected = {
        "EvenfieldError": 4, "UsageError": 2, "SettingError": 2, "SiteError": 2, "PhantomError": 2, "FaultError": 4,
    }  # fmt: skip
    found = {
        name: int(getattr(errors, name).exit_status)
        for name in errors.__all__
        if isinstance(getattr(errors, name), type) and issubclass(getattr(errors, name), Exception)
    }
    assert found == expected
