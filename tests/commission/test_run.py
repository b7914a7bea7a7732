import json
import math

import numpy as np
import pytest

from qa.commission import commission, run_case
from qa.errors import PhantomError, UsageError
from qa.phantoms import load_phantom
from qa.quantities import QUANTITIES
from qa.report.commission_words import case_text, commission_document, commission_table
from qa.report.figures_json import to_json

SHOWN_BY_A_SPHERE = {
    "snr", "snr_background", "uniformity_piu", "uniformity_naad", "ghosting", "length_0", "length_45", "length_90",
    "length_135", "distortion_max", "scale_x", "scale_y", "centre_frequency", "setup_offset",
}  # fmt: skip


def test_every_case_holds_every_figure_beside_its_truth(run):
    (campaign,) = run.campaigns
    assert [case.seed for case in campaign.cases] == list(range(12))
    for case in campaign.cases:
        assert {f.quantity for f in case.figures} | {m.quantity for m in case.missing} == SHOWN_BY_A_SPHERE
        for figure in case.figures:
            assert math.isfinite(figure.true)
            assert math.isfinite(figure.measured)
            assert figure.standard_uncertainty >= 0


def test_tallies_are_what_the_figures_add_up_to(run):
    (campaign,) = run.campaigns
    for tally in campaign.tallies:
        figures = [f for case in campaign.cases for f in case.figures if f.row == tally.row]
        errors = np.array([f.error for f in figures])
        assert tally.measured == len(figures)
        assert tally.bias == pytest.approx(errors.mean(), abs=1e-12)
        if len(figures) > 1:
            assert tally.u_bias == pytest.approx(np.std(errors, ddof=1) / math.sqrt(errors.size), abs=1e-12)
        if tally.coverage is not None:
            held = [abs(f.measured - f.true) <= 2 * f.standard_uncertainty for f in figures]
            assert tally.coverage == pytest.approx(np.mean(held))
        if not tally.missing:
            assert tally.point == pytest.approx(np.sort(np.abs(errors))[math.ceil(0.95 * errors.size) - 1])


def test_errors_are_stated_in_the_unit_of_their_bar(run):
    case = run.campaigns[0].cases[0]
    by_name = {f.quantity: f for f in case.figures}
    snr, length, ghosting = by_name["snr"], by_name["length_0"], by_name["ghosting"]
    assert snr.error == pytest.approx(100 * (snr.measured / snr.true - 1))
    assert length.error == pytest.approx((length.measured - length.true) / case.settings["pixel_mm"][1])
    assert by_name["length_90"].unit == "pixel"
    assert ghosting.error == pytest.approx(ghosting.measured - ghosting.true)
    dy, dx = case.settings["pixel_mm"]
    pixels = 0.75 * math.pi * 85**2 / (dx * dy)
    assert snr.allowed == pytest.approx(400 / math.sqrt(2 * pixels))


def test_one_seed_reproduces_its_case_to_the_last_bit(run, sphere):
    assert repr(run_case(sphere, 7)) == repr(run.campaigns[0].cases[7])
    again = commission(["sphere-170"], 1, seed=7, jobs=1)
    assert repr(again.campaigns[0].cases[0]) == repr(run.campaigns[0].cases[7])


def test_two_workers_give_what_one_gives(run):
    shared = commission(["sphere-170"], 6, jobs=2)
    assert repr(shared.campaigns[0].cases) == repr(run.campaigns[0].cases[:6])


def test_phantoms_of_other_names_are_drawn_differently(run):
    other = run_case(load_phantom("cylinder-200"), 0)
    assert other.snr != run.campaigns[0].cases[0].snr


def test_progress_sees_every_case(sphere):
    seen = []

    def progress(items, title):
        assert title == "Measuring digital scans"
        for item in items:
            seen.append(item)
            yield item

    result = commission([sphere], 2, seed=3, jobs=1, progress=progress)
    assert [number for _, number in seen] == [3, 4]
    assert [case.seed for case in result.campaigns[0].cases] == [3, 4]


def test_a_relative_error_of_three_percent_is_caught(run, sphere, spoiled):
    assert not any(t.met is False for t in run.campaigns[0].tallies if t.quantity == "snr")
    result = commission([sphere], 8, jobs=1, measurer=spoiled(lambda name, v, u: (1.03 * v if name == "snr" else v, u)))
    missed = {t.quantity: t for t in result.campaigns[0].tallies if t.met is False}
    assert not result.met
    assert missed["snr"].bias_met is False
    assert missed["snr"].point_met is False
    assert missed["snr"].coverage_met is False
    assert "missed: bias, 95 % point, coverage" in commission_table(result)


def test_a_fault_in_what_is_tested_is_a_finding_and_the_campaign_goes_on(sphere):
    def broken(*_):
        raise ZeroDivisionError("nought")

    result = commission([sphere], 2, jobs=1, measurer=broken)
    assert not result.met
    snr = next(t for t in result.campaigns[0].tallies if t.quantity == "snr")
    assert snr.measured == 0
    assert snr.missing == (("a fault in the program (ZeroDivisionError: nought)", 2, 0),)
    assert "a fault in the program" in commission_table(result)


def test_the_table_names_every_quantity_with_its_bar_and_seed(run):
    text = commission_table(run)
    assert text.startswith("sphere-170: 12 cases, seeds 0 to 11\n")
    rows = {line.split("  ")[0]: line for line in text.splitlines()}
    for tally in run.campaigns[0].tallies:
        assert str(tally.worst_seed) in rows[tally.row].split()
    assert " 0.15 " in rows["length_45"]
    assert "4 times the sampling limit" in text


def test_one_case_is_printed_with_what_was_drawn(run):
    case = run.campaigns[0].cases[3]
    text = case_text(case)
    assert text.startswith("sphere-170, seed 3\n")
    assert f"channels {case.settings['channels']}" in text
    for name in SHOWN_BY_A_SPHERE:
        assert f"\n{name}" in text


def test_the_document_is_plain_json(run):
    document = json.loads(to_json(commission_document(run)))
    assert document["format"] == "evenfield-commission"
    assert document["machine"]["numpy"] == np.__version__
    (campaign,) = document["campaigns"]
    assert len(campaign["cases"]) == 12
    assert {q["quantity"] for q in campaign["quantities"]} <= set(QUANTITIES)
    figure = campaign["cases"][0]["figures"][0]
    assert set(figure) == {"quantity", "true", "measured", "standard_uncertainty", "error", "error_unit", "allowed"}


@pytest.mark.parametrize(
    ("words", "changes"),
    [
        ("cases is 0", {"cases": 0}),
        ("seed is -1", {"seed": -1}),
        ("jobs is 0", {"jobs": 0}),
        ("phantoms is empty", {"phantoms": []}),
    ],
)
def test_what_cannot_be_is_refused_in_one_sentence(words, changes):
    asked = {"phantoms": ["sphere-170"], "cases": 1, "seed": 0, "jobs": 1} | changes
    with pytest.raises(UsageError, match=words):
        commission(asked.pop("phantoms"), asked.pop("cases"), **asked)


def test_an_unknown_phantom_is_named():
    with pytest.raises(PhantomError, match="no phantom 'cube'"):
        commission(["cube"], 1)


def test_two_phantoms_of_one_name_are_refused(tmp_path, sphere):
    text = '[about]\ntitle = "T"\nsource = "S"\ncautions = "C"\n[body]\nshape = "sphere"\ndiameter_mm = 150.0\n'
    path = tmp_path / "sphere-170.toml"
    path.write_text(text)
    with pytest.raises(UsageError, match="two phantoms are called sphere-170"):
        commission([sphere, path], 1)
