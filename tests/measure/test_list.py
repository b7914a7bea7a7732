"""The list of routines and the table of quantities agree, and each quantity is answered once."""

import math

import numpy as np
import pytest

from qa.measure import ROUTINES, measure
from qa.phantoms import load_phantom
from qa.quantities import QUANTITIES
from qa.records import NotLocated


def test_all_that_routines_name_is_in_the_table():
    assert {name for routine in ROUTINES for name in routine.quantities} <= set(QUANTITIES)


@pytest.mark.parametrize("phantom", ["sphere-170", "sphere-any", "cylinder-200", "lattice-200"])
def test_each_quantity_once(scan, work, phantom):
    done = work(scan(phantom), phantom)
    found, missed = measure(done.acquisition, done.pose, done.phantom)
    names = [m.quantity for m in (*found, *missed)]
    assert len(names) == len(set(names))
    assert set(names) == {name for routine in ROUTINES for name in routine.quantities}
    assert all(m.reason for m in missed)
    for m in found:
        assert m.unit == QUANTITIES[m.quantity].unit
        assert math.isfinite(m.value)
        assert m.standard_uncertainty > 0
        assert m.method
        assert m.method_version >= 1
        assert all(r.slice == m.slice or m.slice is None for r in m.regions)


def test_where_the_phantom_was_not_found_only_the_header_is_measured(scan):
    found, missed = measure(scan(), NotLocated("it is not there"), load_phantom("sphere-170"))
    assert [m.quantity for m in found] == ["centre_frequency"]
    assert {m.reason for m in missed} == {"it is not there"}


def test_same_input_same_output_to_the_last_bit(scan, work):
    first, second = work(scan()), work(scan())
    for name, m in first.found.items():
        assert m.value == second.found[name].value
        assert m.standard_uncertainty == second.found[name].standard_uncertainty


def test_nothing_is_changed_in_the_images(scan, work):
    before = scan().pixels.copy()
    work(scan())
    assert np.array_equal(scan().pixels, before)


@pytest.mark.parametrize("damage", ["zeros", "ones", "nan", "negative", "huge", "second nan"])
def test_images_gone_bad_after_the_phantom_was_found_do_not_end_in_an_exception(scan, work, altered, damage):
    good = work(scan())

    def spoil(stack):
        match damage:
            case "zeros":
                return np.zeros_like(stack)
            case "ones":
                return np.ones_like(stack)
            case "nan":
                stack[:, 100:140, 100:140] = np.nan
            case "negative":
                return -stack
            case "huge":
                return stack.astype(np.float64) * 1e30
        return stack

    bad = altered(scan(), pixels=spoil)
    if damage == "second nan":
        spoiled = scan().repeats[1].pixels.copy()
        spoiled[:, 100:140, 100:140] = np.nan
        bad = type(bad)((scan().repeats[0], altered(scan(), pixels=lambda _: spoiled).repeats[1]))
    with np.errstate(all="ignore"):
        found, missed = measure(bad, good.pose, good.phantom)
    assert all(math.isfinite(m.value) and math.isfinite(m.standard_uncertainty) for m in found)
    assert {m.quantity for m in (*found, *missed)} == {name for routine in ROUTINES for name in routine.quantities}
