from datetime import date

import pytest

from qa.judge import Context, ControlRules, Schedule, control_rules, frequency_drift, schedule_of, true_values, with_derived
from qa.phantoms import load_phantom
from qa.records import Baseline, Measurement, NotMeasured
from qa.site import Charts, Downtime, SiteScanner

DAY = date(2026, 11, 23)
FREQUENCY = Measurement("centre_frequency", 127.732 * (1 + 3e-6), "MHz", 1e-6, "header", 1)
BASE = Baseline("north-3t", "centre_frequency", 127.732, 1e-6, None, 10, date(2026, 1, 5))


def test_drift_is_parts_per_million_from_the_baseline():
    drift = frequency_drift(FREQUENCY, Context("north-3t", "sphere-170", DAY, baselines=(BASE,)))
    assert (drift.quantity, drift.unit) == ("frequency_drift", "ppm")
    assert drift.value == pytest.approx(3.0, abs=1e-6)
    assert drift.standard_uncertainty == pytest.approx(1e-6 / 127.732 * 1e6)
    assert drift.details["baseline_MHz"] == 127.732


def test_without_a_baseline_drift_is_not_measured():
    found, absent = with_derived([FREQUENCY], Context("north-3t", "sphere-170", DAY))
    assert found == (FREQUENCY,)
    assert absent == (NotMeasured("frequency_drift", "there is no baseline of the centre frequency yet"),)


def test_what_is_derived_follows_what_was_measured_once():
    where = Context("north-3t", "sphere-170", DAY, baselines=(BASE,))
    snr = Measurement("snr", 200.0, "1", 1.0, "m", 1)
    found, absent = with_derived([FREQUENCY, snr], where)
    assert [m.quantity for m in found] == ["centre_frequency", "snr", "frequency_drift"]
    assert absent == ()
    assert with_derived(found, where)[0] == found
    assert with_derived([snr], where) == ((snr,), ())


def test_true_dimensions_come_from_the_definition_or_from_the_cross_section():
    assert true_values(load_phantom("cylinder-200")) == {
        "length_0": 200.0, "length_45": 200.0, "length_90": 200.0, "length_135": 200.0, "length_axial": 300.0,
    }  # fmt: skip
    scale = Measurement("scale_x", 0.1, "%", 0.01, "m", 1, details={"true_diameter_mm": 169.2})
    assert true_values(load_phantom("sphere-170"), [scale])["length_45"] == 169.2
    assert true_values(load_phantom("sphere-any"), [scale]) == {}


def test_settings_of_site_toml_reach_judgement():
    assert control_rules(Charts()) == ControlRules()
    chosen = control_rules(Charts.model_validate({"nelson": [1, 2], "cusum": True, "width": 3.5}))
    assert (chosen.nelson, chosen.cusum, chosen.width, chosen.weight) == ((1, 2), True, 3.5, ControlRules().weight)
    scanner = SiteScanner.model_validate(
        {"name": "north-3t", "match": {"station": "N"}, "field_strength_T": 3.0, "every_days": 14, "since": DAY}
    )
    down = Downtime.model_validate({"scanner": "north-3t", "from": DAY, "reason": "magnet exchange"})
    assert schedule_of(scanner, [down]) == Schedule(14, 2, DAY, ((DAY, None),))
