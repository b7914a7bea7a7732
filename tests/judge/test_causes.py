from datetime import date, timedelta

import pytest

from qa.judge.causes import Movement, Pattern, likely_causes, patterns
from qa.quantities import QUANTITIES
from qa.records import Event

DAY = date(2026, 6, 1)


def moved(quantity, direction, earliest=DAY, latest=DAY + timedelta(days=7), **details):
    return Movement(quantity, direction, earliest, latest, f"{quantity} {direction}", details)


VISIT = Event("south", DAY - timedelta(days=4), "service", "filters changed")


def first(*movements, events=(), changes=()):
    found = likely_causes(movements, events, changes)
    return found[0].name if found else None


@pytest.mark.parametrize(
    ("movements", "events", "name"),
    [
        ([moved("snr", "down"), moved("uniformity_piu", "down")], (), "receive element"),
        ([moved("snr_background", "down"), moved("uniformity_naad", "down"), moved("ghosting", "up")], (), "receive element"),
        ([moved("snr", "down"), moved("snr_background", "down")], (), "receive chain"),
        ([moved("ghosting", "up", along_phase_encode=True)], (VISIT,), "ghosts after service"),
        ([moved("ghosting", "up", along_phase_encode=True)], (), "ghosts"),
        ([moved("ghosting", "up", along_phase_encode=False)], (VISIT,), "ghosts"),
        ([moved("scale_x", "up"), moved("length_0", "up"), moved("distortion_max", "up")], (), "gradient along rows"),
        ([moved("length_0", "down"), moved("length_45", "down")], (), "gradient along rows"),
        ([moved("scale_y", "down"), moved("length_90", "down")], (), "gradient along columns"),
        ([moved("scale_x", "up"), moved("scale_y", "up")], (), "scale of both axes"),
        ([moved("lattice_rms", "up"), moved("distortion_max", "up")], (), "distortion"),
        ([moved("slice_thickness", "up")], (), "slice selection"),
        ([moved("slice_position", "down"), moved("slice_position_end", "down")], (), "table or landmark"),
        ([moved("frequency_drift", "down"), moved("centre_frequency", "down")], (), "field drift"),
        ([moved("uniformity_piu", "down")], (), "transmit or intensity correction"),
        ([moved("setup_offset", "up"), moved("setup_tilt", "up")], (), "set-up alone"),
        ([moved("setup_offset", "up"), moved("length_axial", "up")], (), "set-up first"),
        ([moved("ghosting", "down")], (), None),
        ([], (VISIT,), None),
    ],
)
def test_the_first_thing_to_look_at(movements, events, name):
    assert first(*movements, events=events) == name


@pytest.mark.parametrize(
    ("event_day", "kind", "quantities", "fits"),
    [
        (DAY - timedelta(days=4), "service", (), True),
        (DAY + timedelta(days=7), "repair", ("ghosting",), True),
        (DAY + timedelta(days=8), "service", (), False),
        (DAY - timedelta(days=28), "upgrade", (), True),
        (DAY - timedelta(days=29), "service", (), False),
        (DAY - timedelta(days=4), "note", (), False),
        (DAY - timedelta(days=4), "service", ("snr",), False),
    ],
)
def test_a_visit_is_blamed_only_where_the_movement_may_have_begun_after_it(event_day, kind, quantities, fits):
    visit = Event("south", event_day, kind, "visit", quantities)
    found = first(moved("ghosting", "up", along_phase_encode=True), events=[visit])
    assert (found == "ghosts after service") == fits


def test_the_evidence_stands_beside_the_suggestion_each_once():
    cause = likely_causes([moved("ghosting", "up", along_phase_encode=True), moved("snr", "up")], [VISIT])[0]
    assert cause.evidence == (
        "ghosting up",
        "Percent signal ghosting: along phase encode",
        "service on 2026-05-28: filters changed",
    )
    assert cause.source


def test_a_changed_protocol_is_named_with_what_changed():
    found = likely_causes([], (), ["on 2026-06-01 echo time (ms) changed from 20 to 40"])
    assert [c.name for c in found] == ["protocol changed"]
    assert found[0].evidence == ("on 2026-06-01 echo time (ms) changed from 20 to 40",)


def test_at_most_three_and_the_most_telling_first():
    movements = [moved(q, "up") for q in ("ghosting", "slice_thickness", "frequency_drift", "setup_tilt", "slice_position")]
    found = likely_causes(movements)
    assert len(found) == 3
    weights = {p.name: p.weight for p in patterns()}
    assert [weights[c.name] for c in found] == sorted((weights[c.name] for c in found), reverse=True)


def test_the_table_is_sound():
    names = [p.name for p in patterns()]
    assert len(set(names)) == len(names)
    for pattern in patterns():
        assert pattern.look.startswith("Look first at ")
        assert 1 <= pattern.look.count(". ") + 1 <= 4
        assert pattern.source
        assert set(pattern.moved.values()) | set(pattern.any.values()) <= {"up", "down", "away"}
        assert pattern.moved or pattern.any or pattern.changed
        from fnmatch import fnmatchcase

        for names in (*pattern.moved, *pattern.any, *pattern.steady):
            assert all(any(fnmatchcase(q, name) for q in QUANTITIES) for name in names.split("|"))


def test_a_table_of_ones_own_can_be_used():
    own = Pattern("own", "Look first at the lamp.", "experience", moved={"snr": "up"})
    assert [c.name for c in likely_causes([moved("snr", "up")], table=[own])] == ["own"]
