import struct
from dataclasses import fields, replace
from datetime import UTC, date, datetime, timedelta
from pathlib import Path, PurePath

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from qa.errors import UsageError
from qa.records import Baseline, Event, Judged, NotMeasured, SourceFile, Verdict
from qa.store import Who
from qa.store.tables import baselines, events, verdicts


def test_a_session_comes_back_as_it_went_in(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    intake = make.intake(1, kept_at={f"{2:032x}{0:032x}": Path("archive/north-3t/a.dcm")})
    number = record.store_all([intake])[0]
    (session,) = record.sessions("north-3t")
    assert (session.scanner_name, session.day) == ("north-3t", date(2026, 3, 2))
    (kept,) = session.acquisitions
    outcome = intake.outcome
    assert kept.identifier == number
    assert kept.judged == tuple(Judged(m, v) for m, v in zip(outcome.measurements, intake.verdicts, strict=True))
    assert kept.not_measured == outcome.not_measured
    assert kept.scanner == outcome.acquisition.scanner
    assert kept.settings == outcome.acquisition.settings
    assert kept.centre_patient == tuple(outcome.pose.centre_patient)
    assert (kept.rotation_deg, kept.tilt_deg) == (0.7, 0.1)
    assert kept.series_uids == ("1.2.2", "1.2.3")
    assert kept.files[0] == SourceFile(Path("archive/north-3t/a.dcm"), "1.2.2.0", f"{2:032x}{0:032x}")
    assert [str(f.path) for f in kept.files[1:]] == ["inbox/2-1.dcm", "inbox/3-0.dcm", "inbox/3-1.dcm"]
    assert kept.acquired_at == outcome.acquisition.first.acquired_at
    assert kept.taken_in_at == intake.taken_in_at
    assert kept.remarks == ("odd", "a bubble")
    assert (kept.phantom, kept.phantom_sha256, kept.software_version) == ("sphere-170", "ab" * 32, "0.1.0")
    assert (kept.limits_version, kept.limits_sha256) == (1, record.limit_sets()[0].sha256)


def test_what_was_not_found_or_judged_stays_absent(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    outcome = make.outcome(make.series(1, files=1), pose=False)
    record.store_all([make.intake(outcome=outcome, verdicts=[None, None])])
    (kept,) = record.sessions()[0].acquisitions
    assert (kept.centre_patient, kept.rotation_deg, kept.tilt_deg) == (None, None, None)
    assert [judged.verdict for judged in kept.judged] == [None, None]


FLOATS = st.floats(allow_nan=False, allow_infinity=False)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(numbers=st.tuples(FLOATS, FLOATS, FLOATS, FLOATS), text=st.text())
def test_every_number_and_text_keeps_its_bits(record, make, numbers, text):
    value, u, lower, inner = numbers
    record.limits_version("[]", make.who, make.now, "first")
    one = make.measurement(value=value, standard_uncertainty=u, details={"x": [inner], "t": text}, method=text)
    outcome = make.outcome(make.series(10_000 + record.head().number), measurements=[one])
    number = record.store_all([make.intake(outcome=outcome, verdicts=[make.verdict(lower=lower, probability=inner)])])[0]
    (kept,) = (a for s in record.sessions() for a in s.acquisitions if a.identifier == number)
    measured, verdict = kept.judged[0].measurement, kept.judged[0].verdict
    found = [measured.value, measured.standard_uncertainty, verdict.lower, verdict.probability, measured.details["x"][0]]
    # Minus zero becomes zero where it stands in a column of its own, because SQLite keeps no minus zero.
    wanted = [value + 0.0, u + 0.0, lower + 0.0, inner + 0.0, inner]
    assert [struct.pack("d", number) for number in found] == [struct.pack("d", number) for number in wanted]
    assert measured.method == text.replace("\0", "\N{REPLACEMENT CHARACTER}")
    assert measured.details["t"] == text


def test_half_a_surrogate_pair_is_replaced_and_harms_nothing(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    one = make.measurement(method="half \ud83d", details={"half": "\ud83d"})
    record.store_all([make.intake(outcome=make.outcome(measurements=[one]))])
    assert record.sessions()[0].acquisitions[0].judged[0].measurement.method == "half ?"
    assert record.verify().whole


@pytest.mark.parametrize("bad", [float("nan"), float("inf"), float("-inf")])
@pytest.mark.parametrize("place", ["value", "standard_uncertainty"])
def test_what_is_no_number_is_kept_as_not_measured(record, make, bad, place):
    record.limits_version("[]", make.who, make.now, "first")
    wrong, right = make.measurement("snr", **{place: bad}), make.measurement("ghosting", 1.5)
    record.store_all([make.intake(outcome=make.outcome(measurements=[wrong, right]))])
    (kept,) = record.sessions()[0].acquisitions
    assert [(j.measurement.quantity, j.verdict.quantity) for j in kept.judged] == [("ghosting", "ghosting")]
    assert NotMeasured("snr", "the result, or its uncertainty, is no finite number") in kept.not_measured


def test_a_file_taken_in_is_known(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    intake = make.intake(1)
    hashes = {f.sha256 for s in intake.outcome.acquisition.repeats for f in s.files}
    assert record.known_files([*hashes, "f" * 64]) == set()
    record.store_all([intake])
    assert record.known_files([*hashes, "f" * 64]) == hashes
    assert record.known_files(f"{n:064x}" for n in range(2000)) == set()
    assert record.kept_at(f"{2:032x}{1:032x}") == PurePath("inbox/2-1.dcm")
    assert record.kept_at("f" * 64) is None


def test_the_same_acquisition_is_stored_once(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    first = record.store_all([make.intake(1)])
    assert record.store_all([make.intake(1, day=0), make.intake(2)]) == (first[0], first[0] + 1)
    assert record.head().number == first[0] + 1
    assert len(record.sessions()) == 1
    assert len(record.sessions()[0].acquisitions) == 2


def test_two_echoes_in_the_same_files_are_two_acquisitions(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    one = make.series(1)
    other = replace(one, settings=replace(one.settings, echo_ms=40.0))
    numbers = record.store_all([make.intake(outcome=make.outcome(one)), make.intake(outcome=make.outcome(other))])
    assert len(set(numbers)) == 2
    assert [len(a.files) for a in record.sessions()[0].acquisitions] == [2, 2]


def test_all_of_one_call_is_stored_or_nothing(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    undated = make.outcome(make.series(9, when=None))
    before = record.head()
    with pytest.raises(UsageError, match="no date of acquisition"):
        record.store_all([make.intake(1), make.intake(outcome=undated)])
    assert record.head() == before
    assert record.sessions() == ()
    assert record.known_files([f"{2:032x}{0:032x}"]) == set()


def test_verdicts_that_do_not_match_are_a_mistake_of_the_caller(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    with pytest.raises(ValueError, match="1 verdicts do not match 2 measurements"):
        record.store_all([make.intake(verdicts=[None])])


def test_periods_hold_both_their_days(record, make):
    make.fill(record, sessions=4)
    days = [date(2026, 3, 2) + timedelta(days=7 * n) for n in range(4)]
    assert [s.day for s in record.sessions("north-3t")] == days
    assert [s.day for s in record.sessions("north-3t", days[1], days[2])] == days[1:3]
    assert [s.day for s in record.sessions(None, None, days[0])] == days[:1]
    assert record.sessions("south") == ()
    assert record.last_days() == {"north-3t": days[3]}


def test_sessions_stand_in_order_of_scanner_day_and_time(record, make):
    record.limits_version("[]", make.who, make.now, "first")
    late = make.outcome(make.series(50, when=datetime(2026, 3, 2, 9, 0)))  # noqa: DTZ001
    record.store_all(
        [
            make.intake(1, day=1, scanner_name="b"),
            make.intake(outcome=late, scanner_name="b"),
            make.intake(2, day=0, scanner_name="b"),
            make.intake(3, day=5, scanner_name="a"),
        ]
    )
    assert [(s.scanner_name, s.day.day, [a.series_uids[0] for a in s.acquisitions]) for s in record.sessions()] == [
        ("a", 7, ["1.2.6"]),
        ("b", 2, ["1.2.4", "1.2.50"]),
        ("b", 3, ["1.2.2"]),
    ]


def test_a_version_of_the_limits_is_new_only_where_they_changed(record, make):
    first = record.limits_version("[1]", make.who, make.now, "first")
    assert record.limits_version("[1]", Who("bob"), make.now, "again") == first == 1
    assert record.limits_version("[2]", Who("bob"), make.now, "tighter") == 2
    assert record.limits_version("[1]", make.who, make.now, "back") == 3
    kept = record.limit_sets()
    assert [(s.version, s.content, s.who, s.why) for s in kept] == [
        (1, "[1]", make.who, "first"),
        (2, "[2]", Who("bob"), "tighter"),
        (3, "[1]", make.who, "back"),
    ]
    assert kept[0].when == make.now


def test_two_people_changing_limits_at_once_are_told(record, make):
    record.limits_version("[1]", make.who, make.now, "first")
    record.limits_version("[2]", make.who, make.now, "hers", based_on=1)
    with pytest.raises(UsageError, match=r"version 2 was written at .* by Ada Invented.* made from version 1"):
        record.limits_version("[3]", Who("bob"), make.now, "his", based_on=1)
    assert [s.version for s in record.limit_sets()] == [1, 2]
    assert record.limits_version("[3]", Who("bob"), make.now, "his", based_on=2) == 3


def test_a_refusal_is_recorded_once(record, make):
    first = record.refuse(Path("inbox/a.dcm"), "not a DICOM file", "ee" * 32, make.now)
    assert record.refuse(Path("inbox/a.dcm"), "not a DICOM file", "ee" * 32, make.now) == first
    record.refuse(Path("inbox/b.dcm"), "empty", "", make.now + timedelta(days=2))
    assert [(r.path, r.reason, r.when) for r in record.refusals()] == [
        ("inbox/a.dcm", "not a DICOM file", make.now),
        ("inbox/b.dcm", "empty", make.now + timedelta(days=2)),
    ]
    assert [r.path for r in record.refusals(since=make.now + timedelta(days=1))] == ["inbox/b.dcm"]


def test_a_phantoms_definition_is_kept_once(record, make):
    digest = record.keep_phantom("sphere-170", "[about]\n", make.now)
    assert record.keep_phantom("sphere-170", "[about]\n", make.now) == digest
    assert record.phantom(digest) == "[about]\n"
    assert record.phantom("00") is None
    assert record.head().number == 1


def test_a_correction_takes_the_place_of_what_it_names(record, make):
    make.fill(record, sessions=1)
    (old,) = (a.identifier for s in record.sessions() for a in s.acquisitions)
    better = replace(make.intake(1).outcome, measurements=(make.measurement(value=1.0),))
    new = record.replace(old, make.intake(outcome=better), why="measured again with version 0.2")
    (kept,) = record.sessions()[0].acquisitions
    assert (kept.identifier, kept.judged[0].measurement.value) == (new, 1.0)
    with pytest.raises(UsageError, match=f"corrected by entry {new}"):
        record.replace(old, make.intake(outcome=better), why="again")
    newer = record.replace(new, make.intake(outcome=better), why="again")
    assert record.sessions()[0].acquisitions[0].identifier == newer
    assert record.store_all([make.intake(1)]) == (newer,)
    assert record.verify().whole


def test_what_is_withdrawn_counts_no_longer_but_stays(record, make):
    make.fill(record, sessions=2)
    number = record.sessions()[0].acquisitions[0].identifier
    record.withdraw(number, why="the wrong phantom", when=make.now, who=make.who)
    assert [s.day.day for s in record.sessions()] == [9]
    assert record.known_files([f"{2:032x}{0:032x}"]) != set()
    with pytest.raises(UsageError, match="was corrected by"):
        record.withdraw(number, why="again", when=make.now)
    with pytest.raises(UsageError, match="there is none of that number"):
        record.withdraw(99, why="again", when=make.now)
    with pytest.raises(UsageError, match="kind 'limits'"):
        record.withdraw(1, why="again", when=make.now)
    with pytest.raises(UsageError, match="No reason was given"):
        record.withdraw(number, why="  ", when=make.now)
    assert record.verify().whole


def test_a_clock_that_jumped_back_is_remarked_and_loses_nothing(record, make):
    record.limits_version("[1]", make.who, make.now, "first")
    early = make.now - timedelta(days=3)
    assert record.clock_remark(make.now) is None
    assert "3 days before" in record.clock_remark(early)
    record.limits_version("[2]", make.who, early, "by a wrong clock")
    assert [s.version for s in record.limit_sets()] == [1, 2]
    found = record.verify()
    assert found.whole
    assert len(found.remarks) == 1
    assert "entry 2 (limits" in found.remarks[0]
    assert "3 days before" in found.remarks[0]


def test_a_run_is_noted(record, make):
    number = record.note_run("check", make.now, make.now + timedelta(minutes=1), 3, {"taken in": 2})
    assert record.head().number == number
    assert record.verify().whole


def test_a_local_time_without_zone_is_kept_as_the_machines(record, make):
    record.limits_version("[1]", make.who, datetime(2026, 3, 2, 9, 0), "first")  # noqa: DTZ001
    assert record.limit_sets()[0].when == datetime(2026, 3, 2, 9, 0).astimezone(UTC)


def test_every_field_of_a_verdict_has_its_column():
    renamed = {"limit": "limit_text", "quantity": None}
    assert {renamed.get(f.name, f.name) for f in fields(Verdict)} - {None} == set(verdicts.c.keys()) - {"entry", "position"}
    assert {f.name for f in fields(Event)} == set(events.c.keys()) - {"entry"}
    assert {f.name for f in fields(Baseline)} == set(baselines.c.keys()) - {"entry", "rests_on"}
