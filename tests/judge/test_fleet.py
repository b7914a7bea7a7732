import numpy as np
import pytest

from qa.judge import Grounds, assess, compare_fleet


def department(make, levels, **given):
    found = []
    for number, (name, level) in enumerate(levels.items()):
        rng = np.random.default_rng(number)
        values = [{"snr": level + rng.standard_normal(), "ghosting": 0.4} for _ in range(20)]
        sessions = make.history(values, scanner_name=name, **given)
        found.append(assess(name, sessions, Grounds(), sessions[-1].day))
    return found


def test_scanners_of_one_model_are_compared_and_the_odd_one_stands_out(make):
    levels = {"a": 200, "b": 203, "c": 198, "d": 201, "e": 150}
    found = department(make, levels)
    rows = compare_fleet(found, dict.fromkeys(levels, "Model 7, 3 T"))
    snr = {r.scanner_name: r for r in rows if r.quantity == "snr"}
    assert [n for n, r in snr.items() if r.stands_out] == ["e"]
    assert snr["e"].value == pytest.approx(150, abs=1)
    assert snr["e"].others == pytest.approx(200.5, abs=1.5)
    assert snr["a"].scanners == 5
    assert snr["a"].scatter == pytest.approx(1.0, abs=0.8)
    assert [r.quantity for r in rows] == ["snr"] * 5 + ["ghosting"] * 5
    assert not any(r.stands_out for r in rows if r.quantity == "ghosting")


def test_two_or_three_scanners_are_set_side_by_side_and_not_judged(make):
    levels = {"a": 200, "b": 150}
    rows = compare_fleet(department(make, levels), dict.fromkeys(levels, "Model 4"))
    assert [(r.scanner_name, r.apart, r.stands_out) for r in rows if r.quantity == "snr"] == [
        ("a", None, False),
        ("b", None, False),
    ]


def test_models_and_phantoms_are_not_mixed(make):
    levels = {"a": 200, "b": 203}
    found = department(make, levels)
    assert compare_fleet(found, {"a": "Model 4", "b": "Model 7"}) == ()
    assert compare_fleet(found, {"a": "Model 4"}) == ()
    assert compare_fleet(found, {}) == ()
    mixed = department(make, {"a": 200}) + department(make, {"b": 200}, phantom="cylinder-200")
    assert compare_fleet(mixed, dict.fromkeys(levels, "Model 4")) == ()
