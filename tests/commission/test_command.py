import json
from importlib import import_module

import pytest
from typer.testing import CliRunner

from qa.cli import app, main
from qa.errors import FaultError, UsageError

runner = CliRunner()


def call(*words):
    return runner.invoke(app, ["commission", "--phantom", "sphere-170", "--jobs", "1", *words])


def test_a_seed_alone_prints_that_one_case():
    result = call("--seed", "5")
    assert result.exit_code == 0
    assert result.stdout.startswith("sphere-170, seed 5\n")
    assert "error / u" in result.stdout


def test_cases_print_a_table_and_write_the_evidence(tmp_path):
    path = tmp_path / "evidence.pdf"
    result = call("--cases", "2", "--report", str(path), "--as-of", "2026-12-01")
    assert result.stdout.startswith("sphere-170: 2 cases, seeds 0 to 1\n")
    assert path.read_bytes().startswith(b"%PDF-")
    assert str(path) in result.stderr


def test_json_is_one_object_and_nothing_else():
    document = json.loads(call("--cases", "1", "--json").stdout)
    assert [case["seed"] for case in document["campaigns"][0]["cases"]] == [0]


def test_an_error_put_into_the_routines_ends_in_status_1(monkeypatch, spoiled):
    room = import_module("qa.measure")
    assert call("--cases", "4", "--seed", "0").exit_code == 0
    honest = room.measure
    wrong = spoiled(lambda name, v, u: (v + 0.5 if name.startswith("length") else v, u))

    def off_by_half_a_millimetre(acquisition, pose, phantom):
        measured, missed = honest(acquisition, pose, phantom)
        changed = [
            type(one)(**{**vars(one), "value": wrong.spoil(one.quantity, one.value, one.standard_uncertainty)[0]})
            for one in measured
        ]
        return tuple(changed), missed

    monkeypatch.setattr(room, "measure", off_by_half_a_millimetre)
    result = call("--cases", "4", "--seed", "0")
    assert result.exit_code == 1
    assert "length_0" in next(line for line in result.stdout.splitlines() if "missed a bar" in line)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("--cases", "0"), "cases is 0"),
        (("--seed", "-1"), "seed is -1"),
        (("--page", "A3"), "A3"),
        (("--as-of", "yesterday"), "not a date"),
        (("--report", "no/such/folder/r.pdf"), "make it first"),
    ],
)
def test_what_cannot_be_ends_in_one_sentence_and_status_2(words, said, monkeypatch, capsys):
    monkeypatch.setattr("sys.argv", ["evenfield", "commission", "--phantom", "sphere-170", *words])
    with pytest.raises(SystemExit) as stopped:
        main()
    assert stopped.value.code == 2
    assert said in capsys.readouterr().err


def test_a_report_is_never_written_over(tmp_path):
    from qa.commission import check_target, write_evidence

    path = tmp_path / "r.pdf"
    path.write_bytes(b"kept")
    with pytest.raises(UsageError, match="is not written over"):
        check_target(path)
    with pytest.raises(FaultError, match="was not written"):
        write_evidence(path, b"new")
    assert path.read_bytes() == b"kept"
