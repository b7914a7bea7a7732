from dataclasses import replace
from datetime import timedelta

import numpy as np

from qa.judge import streams
from qa.records import Event, Scanner, Settings

HEAD = Settings(
    protocol="QA", receive_coil="head", repetition_ms=500.0, echo_ms=20.0, pixel_mm=(0.98, 0.98), frequency_MHz=127.7
)
BODY = replace(HEAD, receive_coil="body")


def sessions_of(make, ways, **given):
    """One session a week; `ways` holds for each week the settings of its acquisitions."""
    found = []
    for week, settings in enumerate(ways):
        day = make.first + timedelta(weeks=week)
        found.append(
            make.session(
                day,
                *(
                    make.acquisition(10 * week + i, day, {"snr": 100 + week}, settings=s, **given)
                    for i, s in enumerate(settings)
                ),
            )
        )
    return found


def test_one_setting_makes_one_stream_in_order_of_day(make):
    (stream,) = streams(reversed(sessions_of(make, [[HEAD]] * 4)))
    assert stream.values.tolist() == [100, 101, 102, 103]
    assert stream.days.tolist() == [make.first.toordinal() + 7 * i for i in range(4)]
    assert stream.acquisitions == (0, 10, 20, 30)
    assert (stream.quantity, stream.phantom, stream.coil, stream.unit) == ("snr", "sphere-170", "head", "1")
    assert [start.index for start in stream.starts] == [0]


def test_coils_used_side_by_side_are_streams_of_their_own(make):
    found = streams(sessions_of(make, [[HEAD, BODY]] * 3))
    assert [(s.coil, s.values.size) for s in found] == [("head", 3), ("body", 3)]


def test_a_coil_changed_for_good_goes_on_in_a_new_segment(make):
    (stream,) = streams(sessions_of(make, [[HEAD]] * 3 + [[BODY]] * 2))
    assert [(s.index, s.reason) for s in stream.starts] == [
        (0, "the first session"),
        (3, "receive coil changed from head to body"),
    ]
    assert stream.values[stream.segment].tolist() == [103, 104]


def test_another_coil_for_one_week_does_not_break_the_usual_stream(make):
    found = streams(sessions_of(make, [[HEAD]] * 3 + [[BODY]] + [[HEAD]] * 3))
    assert [(s.coil, s.values.size, len(s.starts)) for s in found] == [("head", 6, 1), ("body", 1, 1)]


def test_small_differences_and_the_frequency_are_no_change_of_settings(make):
    ways = [[replace(HEAD, repetition_ms=500.0 + 0.3 * i, frequency_MHz=127.7 + i, pixel_mm=(0.98, 0.981))] for i in range(5)]
    (stream,) = streams(sessions_of(make, ways))
    assert len(stream.starts) == 1


def test_changes_are_told_in_words(make):
    changed = replace(HEAD, echo_ms=40.0, pixel_mm=(1.2, 0.98), phase_encode="row")
    (stream,) = streams(sessions_of(make, [[HEAD], [changed]]))
    assert stream.starts[1].reason == (
        "pixel size (mm) changed from 0.98 by 0.98 to 1.2 by 0.98; echo time (ms) changed from 20 to 40; "
        "phase-encode direction changed from unknown to row"
    )


def test_software_and_method_start_new_segments(make):
    a, b = make.first, make.first + timedelta(weeks=1)
    scanner = Scanner(software="V2", field_strength_T=3.0)
    first, second = make.acquisition(1, a, {"snr": 1}), make.acquisition(2, b, {"snr": 2}, scanner=scanner, method_version=2)
    (stream,) = streams([make.session(a, first), make.session(b, second)])
    assert stream.starts[1].reason == (
        "scanner software changed from V1 to V2; the method changed from method (version 1) to method (version 2)"
    )


def test_an_event_starts_a_segment_only_if_it_says_so_and_what_is_measured_on_its_day_counts_as_after_it(make):
    day = make.first + timedelta(weeks=2)
    restart = Event("north-3t", day, "replacement", "element 3 replaced", ("snr",), restarts_baseline=True)
    history = sessions_of(make, [[HEAD]] * 5)
    assert streams(history, [restart])[0].starts[1].index == 2
    assert streams(history, [restart])[0].starts[1].reason == "the baseline was restarted: element 3 replaced"
    assert len(streams(history, [replace(restart, restarts_baseline=False)])[0].starts) == 1
    assert len(streams(history, [replace(restart, quantities=("ghosting",))])[0].starts) == 1
    assert len(streams(history, [replace(restart, quantities=())])[0].starts) == 2
    before = replace(restart, day=make.first - timedelta(days=3))
    assert len(streams(history, [before])[0].starts) == 1


def test_measured_twice_on_a_day_the_last_counts(make):
    day = make.first
    one, two = make.acquisition(1, day, {"snr": 50}), make.acquisition(2, day, {"snr": 100})
    (stream,) = streams([make.session(day, one, two)])
    assert (stream.values.tolist(), stream.acquisitions) == ([100.0], (2,))


def test_phantoms_stay_apart_and_no_session_gives_no_stream(make):
    day = make.first
    found = streams(
        [
            make.session(
                day, make.acquisition(1, day, {"snr": 50}), make.acquisition(2, day, {"snr": 60}, phantom="cylinder-200")
            )
        ]
    )
    assert [(s.phantom, s.values.tolist()) for s in found] == [("cylinder-200", [60.0]), ("sphere-170", [50.0])]
    assert streams([]) == ()
    assert np.array_equal(found[0].uncertainties, [0.1])
