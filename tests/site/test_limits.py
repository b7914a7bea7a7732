import dataclasses

import pytest
from pydantic import ValidationError

from qa.records import Limit
from qa.site import limits_json, limits_sha256, parse_limits, shipped_limits
from qa.site.limits import LimitTable

# The table of published defaults, written a second time by hand: quantity, field strength, below which field strength,
# slice thickness, lower, upper, nominal, plus or minus, per cent of baseline, warning there, per day, warning there.
HEAD = {"sectioned-190", "sphere-170", "cylinder-200"}
PUBLISHED = {
    *((p, "uniformity_piu", None, 3.0, None, 87.5, None, None, None, None, None, None, None) for p in HEAD),
    *((p, "uniformity_piu", 3.0, None, None, 82.0, None, None, None, None, None, None, None) for p in HEAD),
    ("*", "ghosting", None, None, None, None, 2.5, None, None, None, None, None, None),
    ("sectioned-190", "length_0", None, None, None, None, None, None, 2.0, None, None, None, None),
    ("sectioned-190", "length_45", None, None, None, None, None, None, 2.0, None, None, None, None),
    ("sectioned-190", "length_90", None, None, None, None, None, None, 2.0, None, None, None, None),
    ("sectioned-190", "length_135", None, None, None, None, None, None, 2.0, None, None, None, None),
    ("sectioned-190", "length_axial", None, None, None, None, None, None, 2.0, None, None, None, None),
    ("*", "slice_thickness", None, None, 5.0, None, None, 5.0, 0.7, None, None, None, None),
    ("*", "slice_position", None, None, None, None, None, 0.0, 2.5, None, None, None, None),
    ("*", "slice_position_end", None, None, None, None, None, 0.0, 2.5, None, None, None, None),
    ("*", "snr", None, None, None, None, None, None, None, 90.0, 95.0, None, None),
    ("*", "frequency_drift", None, None, None, None, None, None, None, None, None, 1.0, 0.5),
}
COLUMNS = (
    "phantom", "quantity", "field_strength_T", "field_strength_below_T", "slice_thickness_mm", "lower", "upper", "nominal",
    "plus_minus", "lower_percent_of_baseline", "warn_percent_of_baseline", "per_day", "warn_per_day",
)  # fmt: skip


def test_the_shipped_limits_are_the_published_ones():
    shipped = shipped_limits()
    assert {tuple(getattr(limit, column) for column in COLUMNS) for limit in shipped} == PUBLISHED
    assert len(shipped) == len(PUBLISHED)
    assert all(limit.shipped and limit.source and limit.rule == "simple" and limit.scanner == "*" for limit in shipped)


def test_every_key_is_its_own():
    keys = [limit.key for limit in shipped_limits()]
    assert len(set(keys)) == len(keys)
    assert "uniformity_piu, phantom sphere-170, below 3 T (shipped)" in keys


def test_limits_come_back_from_json_as_they_were():
    limits = (Limit("snr", lower=0.1 + 0.2, coil="Kopf ä", key="k"), *shipped_limits())
    text = limits_json(limits)
    assert parse_limits(text) == limits
    assert limits_json(parse_limits(text)) == text
    assert parse_limits(text.replace('"rule":', '"later":1,"rule":')) == limits


def test_the_hash_follows_the_content():
    shipped = shipped_limits()
    changed = (dataclasses.replace(shipped[0], lower=87.6), *shipped[1:])
    assert limits_sha256(shipped) == limits_sha256(tuple(shipped))
    assert limits_sha256(shipped) != limits_sha256(changed)


def test_lists_become_one_limit_for_each_combination():
    table = LimitTable.model_validate({"quantity": ["snr", "ghosting"], "scanner": ["a", "b"], "lower": 1, "source": "s"})
    assert [(limit.quantity, limit.scanner, limit.lower, limit.source) for limit in table.limits()] == [
        ("snr", "a", 1.0, "s"),
        ("snr", "b", 1.0, "s"),
        ("ghosting", "a", 1.0, "s"),
        ("ghosting", "b", 1.0, "s"),
    ]


def test_switched_off_is_a_limit_without_bounds():
    (limit,) = LimitTable.model_validate({"quantity": "snr", "off": True, "source": "no baseline wanted"}).limits()
    assert limit == Limit("snr", source="no baseline wanted", key="snr")


@pytest.mark.parametrize("warn", [{"warn_percent_of_baseline": 101}, {"warn_percent_of_baseline": 99, "upper": 3.0}])
def test_a_warning_on_the_open_side_is_allowed(warn):
    LimitTable.model_validate({"quantity": "snr", "lower_percent_of_baseline": 90, **warn})


def test_an_infinite_bound_is_refused():
    with pytest.raises(ValidationError, match="finite"):
        LimitTable.model_validate({"quantity": "snr", "lower": float("-inf")})
