from dataclasses import replace
from datetime import date

import numpy as np
import pytest

from qa.records import CONFORMITIES, Judged


def test_a_history_says_what_the_sessions_say(record, make):
    make.fill(record, sessions=4)
    record.store_all(
        [make.intake(20, day=1, scanner_name="b", verdicts=[None, make.verdict("ghosting", upper=3.5, lower=None)])]
    )
    history = record.history()
    kept = [a for s in record.sessions() for a in s.acquisitions]
    assert [a.identifier for a in history.acquisitions] == [a.identifier for a in kept]
    for light, full in zip(history.acquisitions, kept, strict=True):
        assert light == replace(full, judged=(), files=(), series_uids=(), not_measured=())
    rows = [(n, p, j) for n, a in enumerate(kept) for p, j in enumerate(a.judged, start=1)]
    assert history.acquisition.tolist() == [n for n, _, _ in rows]
    assert history.position.tolist() == [p for _, p, _ in rows]
    assert [history.quantities[q] for q in history.quantity] == [j.measurement.quantity for _, _, j in rows]
    assert [history.methods[m] for m in history.method] == [
        (j.measurement.method, j.measurement.method_version) for _, _, j in rows
    ]
    assert history.values.tolist() == [j.measurement.value for _, _, j in rows]
    assert history.uncertainties.tolist() == [j.measurement.standard_uncertainty for _, _, j in rows]
    words = [None if c < 0 else CONFORMITIES[c] for c in history.conformity]
    assert words == [None if j.verdict is None else j.verdict.conformity for _, _, j in rows]
    for name in ("lower", "upper"):
        bounds = [None if j.verdict is None else getattr(j.verdict, name) for _, _, j in rows]
        assert [None if np.isnan(v) else v for v in getattr(history, name)] == bounds
    places = [(kept[n].identifier, p) for n, p, _ in rows][::-1]
    assert record.judged(places) == tuple(j for _, _, j in rows[::-1])


def test_sessions_without_details_hold_the_same_figures(record, make):
    make.fill(record, sessions=3)
    record.store_all([make.intake(20, day=1, scanner_name="b", verdicts=[None, make.verdict("ghosting", warned=False)])])
    for period in ((), ("north-3t", date(2026, 3, 9), None)):
        full, light = record.sessions(*period), record.sessions(*period, details=False)
        assert [(s.scanner_name, s.day) for s in light] == [(s.scanner_name, s.day) for s in full]
        for few, all_ in zip(light, full, strict=True):
            assert few.acquisitions == tuple(
                replace(
                    a,
                    judged=tuple(Judged(replace(j.measurement, details={}, regions=()), j.verdict) for j in a.judged),
                    files=(),
                    series_uids=(),
                    not_measured=(),
                )
                for a in all_.acquisitions
            )


def test_equal_settings_are_one_object(record, make):
    make.fill(record, sessions=3)
    history = record.history()
    assert len({id(a.settings) for a in history.acquisitions}) == 1
    assert len({id(a.scanner) for a in history.acquisitions}) == 1


def test_a_history_may_be_of_one_scanner_and_period(record, make):
    make.fill(record, sessions=4)
    assert record.history("north-3t", date(2026, 3, 9), date(2026, 3, 16)).acquisition.tolist() == [0, 0, 1, 1]
    assert record.history("south").values.size == 0
    assert record.history(to_day=date(2026, 3, 2)).values.size == 2


def test_what_was_corrected_is_left_out_of_a_history(record, make):
    make.fill(record, sessions=2)
    old = record.sessions()[0].acquisitions[0].identifier
    better = replace(make.intake(1).outcome, measurements=(make.measurement(value=1.0),))
    new = record.replace(old, make.intake(outcome=better), why="measured again")
    history = record.history()
    assert [a.identifier for a in history.acquisitions] == [new, old + 1]
    assert history.values.tolist()[0] == 1.0
    assert history.acquisition.tolist() == [0, 1, 1]


def test_an_empty_record_has_an_empty_history(record):
    history = record.history()
    assert (history.acquisitions, history.values.shape, history.quantities) == ((), (0,), ())


def test_a_figure_that_is_not_there(record, make):
    make.fill(record, sessions=1)
    with pytest.raises(KeyError):
        record.judged([(99, 1)])
