from datetime import date, timedelta

import pytest

from qa.errors import UsageError
from qa.store import Head, Who

TODAY = date(2026, 3, 31)


def test_an_event_comes_back_as_it_went_in(record, make):
    number = record.add_event(make.event(), today=TODAY, when=make.now, who=make.who)
    (kept,) = record.events()
    assert kept.what == make.event()
    assert (kept.entry, kept.who, kept.when, kept.why, kept.corrects) == (number, make.who, make.now, "", None)
    bare = make.event(quantities=(), restarts_baseline=False, until=None, day=date(2026, 2, 1), scanner_name="south")
    record.add_event(bare, today=TODAY, when=make.now)
    assert [e.what for e in record.events()] == [bare, make.event()]
    assert [e.what for e in record.events("south")] == [bare]


def test_an_event_that_is_corrected_or_withdrawn_stays_in_the_record(record, make):
    first = record.add_event(make.event(), today=TODAY, when=make.now)
    better = make.event(day=date(2026, 2, 27))
    with pytest.raises(UsageError, match="No reason was given"):
        record.add_event(better, today=TODAY, when=make.now, corrects=first)
    second = record.add_event(better, today=TODAY, when=make.now, corrects=first, why="the wrong day")
    assert [(e.entry, e.corrects, e.why) for e in record.events()] == [(second, first, "the wrong day")]
    record.withdraw(second, why="it was the other scanner", when=make.now)
    assert record.events() == ()
    assert [e.entry for e in record.events(withdrawn=True)] == [second, first]
    assert record.verify().whole


@pytest.mark.parametrize(
    ("other", "said"),
    [
        ({"day": date(2026, 4, 1), "until": None}, r"lies in the future \(2026-04-01; today is 2026-03-31\).*'downtime'"),
        ({"text": "  "}, "has no text"),
        ({"until": date(2026, 2, 1)}, "ends on 2026-02-01, before it begins on 2026-03-01"),
        ({"quantities": ("snr", "gosting")}, "no quantity 'gosting': did you mean 'ghosting'?"),
        ({"kind": "servic"}, "no kind of event 'servic': did you mean 'service'?"),
    ],
)
def test_an_event_that_cannot_be_is_refused(record, make, other, said):
    with pytest.raises(UsageError, match=said):
        record.add_event(make.event(**other), today=TODAY, when=make.now)
    assert record.head() == Head(0, "")


def test_downtime_may_be_planned(record, make):
    planned = make.event(kind="downtime", day=date(2026, 5, 1), until=date(2026, 5, 3))
    record.add_event(planned, today=TODAY, when=make.now)
    assert record.events()[0].what == planned


def test_a_baseline_comes_back_as_it_went_in(record, make):
    number = record.set_baseline(make.baseline(), today=TODAY, when=make.now, why="accepted", rests_on=(1, 2), who=make.who)
    by_hand = make.baseline(sessions=0, scatter=None, since=date(2026, 3, 20), value=70.0)
    record.set_baseline(by_hand, today=TODAY, when=make.now, why="after service")
    kept = record.baselines("north-3t")
    assert [k.what for k in kept] == [make.baseline(), by_hand]
    assert (kept[0].entry, kept[0].who, kept[0].why) == (number, make.who, "accepted")
    assert record.baselines("south") == ()


@pytest.mark.parametrize(
    ("other", "why", "said"),
    [
        ({"sessions": 1}, "x", "from one session says nothing of its scatter"),
        ({"since": date(2026, 4, 1)}, "x", r"begins in the future \(2026-04-01; today is 2026-03-31\)"),
        ({"value": float("nan")}, "x", "needs a finite value"),
        ({"standard_uncertainty": -1.0}, "x", "needs a finite value"),
        ({"scatter": float("inf")}, "x", "needs a finite value"),
        ({"quantity": "srn"}, "x", "did you mean 'snr'"),
        ({}, " ", "No reason was given: a baseline needs one"),
    ],
)
def test_a_baseline_that_cannot_be_is_refused(record, make, other, why, said):
    with pytest.raises(UsageError, match=said):
        record.set_baseline(make.baseline(**other), today=TODAY, when=make.now, why=why)
    assert record.head().number == 0


def sign(record, make, first=date(2026, 3, 1), last=TODAY, **other):
    given = {"comment": "seen", "who": make.who, "today": TODAY, "when": make.now}
    return record.sign("north-3t", first, last, **{**given, **other})


def test_a_period_is_signed_by_name(record, make):
    make.fill(record)
    end = record.head()
    number = sign(record, make)
    (signed,) = record.sign_offs()
    assert (signed.entry, signed.who) == (number, make.who)
    period = signed.what
    assert (period.scanner_name, period.first_day, period.last_day) == ("north-3t", date(2026, 3, 1), TODAY)
    assert (period.comment, period.sessions, period.head) == ("seen", 3, end)


@pytest.mark.parametrize(
    ("other", "said"),
    [
        ({"who": Who("ada")}, "needs the name of the person"),
        ({"first": date(2026, 1, 1), "last": date(2026, 1, 31)}, "nothing to sign: north-3t has no session from 2026-01-01"),
        ({"last": date(2026, 4, 1)}, "in the future"),
        ({"last": date(2026, 2, 1)}, "before it begins"),
    ],
)
def test_a_period_that_cannot_be_signed(record, make, other, said):
    make.fill(record)
    before = record.head()
    with pytest.raises(UsageError, match=said):
        sign(record, make, **other)
    assert record.head() == before


def test_a_period_is_signed_once_by_each_person(record, make):
    make.fill(record)
    first = sign(record, make)
    with pytest.raises(UsageError, match=f"Ada Invented has signed .* before, as entry {first}"):
        sign(record, make, who=Who("other", " ada INVENTED"))
    sign(record, make, who=Who("bob", "Bob Invented"))
    assert [s.who.name for s in record.sign_offs("north-3t")] == ["Ada Invented", "Bob Invented"]
    record.withdraw(first, why="signed too early", when=make.now)
    sign(record, make)
    assert [s.who.name for s in record.sign_offs()] == ["Bob Invented", "Ada Invented"]


def test_what_came_after_a_signature_is_named(record, make):
    make.fill(record)
    sign(record, make)
    (signed,) = record.sign_offs()
    assert record.added_since(signed) == ()
    old = record.sessions()[0].acquisitions[0].identifier
    late = record.store_all([make.intake(9, day=3)])[0]
    record.store_all([make.intake(10, day=60)])
    record.withdraw(old, why="wrong phantom", when=make.now + timedelta(days=70))
    assert record.added_since(signed) == (old, late)


def test_what_came_after_the_last_signature_is_named_until_somebody_signs_again(record, make):
    make.fill(record)
    assert record.added_to_signed() == {}
    first = sign(record, make)
    assert record.added_to_signed() == {}
    late = record.store_all([make.intake(9, day=3), make.intake(10, day=60)])[0]
    assert record.added_to_signed() == {first: (late,)}
    second = sign(record, make, who=Who("bob", "Bob Invented"))
    assert record.added_to_signed() == {}
    better = record.replace(late, make.intake(9, day=3), why="measured again")
    assert record.added_to_signed() == {second: (late, better)}
    record.withdraw(second, why="signed too early", when=make.now)
    assert record.added_to_signed() == {first: (late, better)}
    sign(record, make, who=Who("bob", "Bob Invented"))
    assert record.added_to_signed() == {}


def test_entries_of_a_wrong_clock_are_kept_with_a_remark(record, make):
    record.add_event(make.event(), today=TODAY, when=make.now)
    record.add_event(make.event(), today=TODAY, when=make.now - timedelta(hours=5))
    assert ["5 hours before" in remark for remark in record.verify().remarks] == [True]


def test_when_the_record_began(record, make):
    assert record.began() is None
    record.add_event(make.event(), today=TODAY, when=make.now)
    assert record.began() == make.now
