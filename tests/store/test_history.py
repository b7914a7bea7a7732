from dataclasses import replace
from datetime import UTC, date, datetime, timedelta

import pytest

from qa.records import OUT_OF_LIMITS, Judged, Settings

NOW = datetime(2026, 3, 2, 8, 30, tzinfo=UTC)


def test_a_history_says_what_the_sessions_say(record, make):
    make.fill(record, sessions=4)
    fails = make.verdict("ghosting", conformity="fail", upper=-0.5, lower=None)
    record.store_all(
        [
            make.intake(20, day=1, scanner_name="b", verdicts=[None, fails]),
            make.intake(21, day=2, scanner_name="b", verdicts=[make.verdict("snr", conformity="conditional fail"), None]),
        ]
    )
    history = record.history()
    kept = [(s, a) for s in record.sessions() for a in s.acquisitions]
    assert history.identifiers.tolist() == [a.identifier for _, a in kept]
    assert history.days.tolist() == [s.day.toordinal() for s, _ in kept]
    assert [history.scanner_names[i] for i in history.scanner_name] == [s.scanner_name for s, _ in kept]
    assert [history.phantoms[i] for i in history.phantom] == [a.phantom for _, a in kept]
    assert [history.settings[i] for i in history.setting] == [replace(a.settings, frequency_MHz=None) for _, a in kept]
    assert [history.scanners[i] for i in history.scanner] == [a.scanner for _, a in kept]
    rows = [(n, p, j) for n, (_, a) in enumerate(kept) for p, j in enumerate(a.judged, start=1)]
    assert history.acquisition.tolist() == [n for n, _, _ in rows]
    assert history.position.tolist() == [p for _, p, _ in rows]
    assert [history.quantities[q] for q in history.quantity] == [j.measurement.quantity for _, _, j in rows]
    assert [history.methods[m] for m in history.method] == [
        (j.measurement.method, j.measurement.method_version) for _, _, j in rows
    ]
    assert history.values.tolist() == [j.measurement.value for _, _, j in rows]
    assert history.uncertainties.tolist() == [j.measurement.standard_uncertainty for _, _, j in rows]
    out = [j.verdict is not None and j.verdict.conformity in OUT_OF_LIMITS for _, _, j in rows]
    assert history.out.tolist() == out
    assert sum(out) == 2
    places = [(int(history.identifiers[n]), p) for n, p, _ in rows][::-1]
    assert record.judged(places) == tuple(j for _, _, j in rows[::-1])


def test_the_frequency_makes_no_settings_of_its_own(record, make):
    make.fill(record, sessions=0)
    for number, frequency in enumerate((127.7, 127.70001, None)):
        when = NOW + timedelta(days=number)
        settings = Settings('Q"A, {x}', receive_coil="head", frequency_MHz=frequency, filtered=True)
        series = make.series(number + 50, when=when.replace(tzinfo=None), settings=settings)
        record.store_all([make.intake(outcome=make.outcome(series))])
    history = record.history()
    assert history.setting.tolist() == [0, 0, 0]
    assert history.settings == (Settings('Q"A, {x}', receive_coil="head", filtered=True),)


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
    kept = [a for s in record.sessions() for a in s.acquisitions]
    assert len({id(a.settings) for a in kept}) == len({id(a.scanner) for a in kept}) == 1
    assert len(record.history().settings) == len(record.history().scanners) == 1


def test_a_history_may_be_of_one_scanner_and_period(record, make):
    make.fill(record, sessions=4)
    fails = [make.verdict(quantity, conformity="fail") for quantity in ("snr", "ghosting")]
    record.store_all([make.intake(20, day=1, scanner_name="a", verdicts=fails)])
    one = record.history("north-3t", date(2026, 3, 9), date(2026, 3, 16))
    assert (one.acquisition.tolist(), one.out.tolist()) == ([0, 0, 1, 1], [False] * 4)
    assert record.history("a").out.tolist() == [True, True]
    assert record.history("south").values.size == 0
    early = record.history(to_day=date(2026, 3, 2))
    assert (early.values.size, early.identifiers.size, early.scanner_names) == (2, 1, ("north-3t",))


def test_what_was_corrected_is_left_out_of_a_history(record, make):
    make.fill(record, sessions=2)
    old = record.sessions()[0].acquisitions[0].identifier
    better = replace(make.intake(1).outcome, measurements=(make.measurement(value=1.0),))
    new = record.replace(old, make.intake(outcome=better), why="measured again")
    history = record.history()
    assert history.identifiers.tolist() == [new, old + 1]
    assert history.values.tolist()[0] == 1.0
    assert history.acquisition.tolist() == [0, 1, 1]


def test_an_empty_record_has_an_empty_history(record):
    history = record.history()
    assert (history.identifiers.shape, history.values.shape, history.quantities) == ((0,), (0,), ())
    assert (history.scanner_names, history.out.dtype, history.days.dtype) == ((), bool, int)


def test_a_figure_that_is_not_there(record, make):
    make.fill(record, sessions=1)
    with pytest.raises(KeyError):
        record.judged([(99, 1)])
