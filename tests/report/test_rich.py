import csv
import dataclasses
import hashlib
import io
import json
from datetime import date

import numpy as np
import pytest
from pypdf import PdfReader

from qa.records import Measurement, Region
from qa.report.content import Course, Forecast
from qa.report.data import COLUMNS, figures_csv, sessions_json
from qa.report.maps import draw_displacements, maps_of
from qa.report.scanner import lay_out_scanner, render_scanner_report


@pytest.fixture(scope="module")
def reader(rich):
    return PdfReader(io.BytesIO(render_scanner_report(rich)))


@pytest.fixture(scope="module")
def page(rich):
    return lay_out_scanner(rich)[0]


def test_the_first_page_is_enough_for_most(reader):
    text = " ".join(reader.pages[0].extract_text().split())
    for words in (
        "Out of limits: ghosting on sphere-170", "Drifting: signal-to-noise ratio", "Due: the next session on 30 Nov 2026",
        "Look first at", "Evidence: ghosting up from 0.42 %", "a person decides", "Since the report of 16 Nov 2026",
        "next due 30 Nov 2026",
        "Control state", "out of control", "in control",
    ):  # fmt: skip
        assert words in text, words


def test_each_quantity_says_limit_control_baseline_and_forecast(page):
    by_title = {trend.title: {note.name: note.text for note in trend.notes} for trend in page.trends}
    snr = by_title["Signal-to-noise ratio, two images"]
    assert snr["Limit"] == "at least 190 (90 % of baseline), simple acceptance; invented"
    assert snr["Forecast"].startswith("at this rate it falls below 190 on 28 Dec 2026")
    assert "from 10 sessions, in force since 1 Dec 2025" in snr["Baseline"]
    assert "between 24 Aug and 7 Sep 2026" in by_title["Percent signal ghosting"]["Changed"]
    assert len(page.trends) == 14
    assert [t.title for t in page.trends if t.compared] == ["Percent signal ghosting"]


def test_events_carry_the_letters_of_the_charts(page):
    assert [(row.letter, row.day, row.kind) for row in page.happenings] == [
        ("A", "12 Feb 2026", "upgrade"),
        ("", "2 Mar 2026", "change found"),
        ("B", "27 Aug 2026", "service"),
    ]
    assert page.signatures[0].kind == "A. Example"


def test_a_value_out_of_limits_says_by_how_much_and_how_sure(made):
    session = made.session(1, made.last_day, {"ghosting": ("%", 2.9, 0.06, None, 2.5, "at most 2.5 %")})
    acquisition = session.acquisitions[0]
    judged = acquisition.judged[0]
    verdict = dataclasses.replace(judged.verdict, probability=0.0123)
    judged = dataclasses.replace(judged, verdict=verdict)
    session = dataclasses.replace(session, acquisitions=(dataclasses.replace(acquisition, judged=(judged,)),))
    page = lay_out_scanner(made.content([session]))[0]
    notes = {n.name: n.text for n in page.trends[0].notes}
    assert notes["Out by"] == (
        "beyond the limit by 0.40\u2009%, with an expanded uncertainty of 0.12\u2009%; "
        "the probability that it conforms is 1.2 %"
    )


def test_the_image_and_regions_of_a_value_are_named(made):
    session = made.session(1, made.last_day, {"ghosting": ("%", 0.4, 0.06, None, 2.5, "at most 2.5 %")})
    acquisition = session.acquisitions[0]
    region = Region("ghost, top", "polygon", 6, ((0.0, 0.0), (1.0, 0.0), (1.0, 1.0)))
    measurement = dataclasses.replace(
        acquisition.judged[0].measurement, regions=(region, dataclasses.replace(region, name="ghost, left"))
    )
    judged = (dataclasses.replace(acquisition.judged[0], measurement=measurement),)
    session = dataclasses.replace(session, acquisitions=(dataclasses.replace(acquisition, judged=judged),))
    content = made.content([session], pictures=(made.picture(rows=32, columns=32, pixel_mm=(7.8, 7.8)),))
    notes = {n.name: n.text for n in lay_out_scanner(content)[0].trends[0].notes}
    assert notes["Read in"] == "slice 6, image 1, regions 4, 6"


def test_the_data_behind_it_travel_inside_and_agree(rich, reader):
    names = {name: data[0] for name, data in reader.attachments.items()}
    assert set(names) == {"figures.csv", "sessions.json"}
    rows = list(csv.DictReader(io.StringIO(names["figures.csv"].decode("utf-8-sig"))))
    assert tuple(rows[0]) == COLUMNS
    figures = [(a, j) for s in rich.sessions for a in s.acquisitions for j in a.judged]
    measured = [row for row in rows if row["value"]]
    assert len(measured) == len(figures) == 49 * 14
    assert [float(row["value"]) for row in measured] == [j.measurement.value for _, j in figures]
    assert all(row["reason_not_measured"] for row in rows if not row["value"])
    document = json.loads(names["sessions.json"])
    assert document["format"] == "evenfield-report-data"
    assert [s["day"] for s in document["sessions"]] == [s.day.isoformat() for s in rich.sessions]
    last = document["sessions"][-1]["acquisitions"][0]["measurements"]
    assert [m["value"] for m in last] == [j.measurement.value for j in rich.sessions[-1].acquisitions[0].judged]
    files = reader.trailer["/Root"]["/AF"]
    assert {f.get_object()["/AFRelationship"] for f in files} == {"/Data"}


def test_their_hashes_stand_in_the_report(rich, page):
    said = " ".join(fact.text for fact in page.provenance)
    assert hashlib.sha256(figures_csv(rich.sessions)).hexdigest() in said
    assert hashlib.sha256(sessions_json(rich)).hexdigest() in said


def test_a_spreadsheet_takes_no_text_for_a_formula(made):
    settings = dataclasses.replace(made.settings, protocol="=HYPERLINK(1)", receive_coil="@x")
    session = made.session(1, made.last_day, {"snr": made.steady["snr"]}, settings=settings)
    row = next(csv.DictReader(io.StringIO(figures_csv([session]).decode("utf-8-sig"))))
    assert (row["protocol"], row["coil"]) == ("'=HYPERLINK(1)", "'@x")


def structure(reader):
    """All structure elements of a tagged PDF, in reading order."""
    waiting = [reader.trailer["/Root"]["/StructTreeRoot"].get_object()]
    while waiting:
        node = waiting.pop()
        if "/S" in node:
            yield node
        kids = node.get("/K", [])
        kids = [
            kid.get_object() if hasattr(kid, "get_object") else kid for kid in (kids if isinstance(kids, list) else [kids])
        ]
        waiting += [kid for kid in reversed(kids) if hasattr(kid, "get") and ("/S" in kid or "/K" in kid)]


def test_every_figure_has_words_for_those_who_do_not_see_it(reader):
    found = [node.get("/Alt") for node in structure(reader) if node["/S"] == "/Figure"]
    assert len(found) == 14 + 14 + 2 + 1
    assert all(alt and len(alt) > 40 for alt in found)


def test_tables_have_header_cells_and_headings_their_levels(reader):
    kinds = [node["/S"] for node in structure(reader)]
    assert {"/H1", "/H2", "/H3", "/Table", "/TH", "/TD", "/Figure"} <= set(kinds)
    assert kinds.count("/H1") == 1


def test_a_forecast_beyond_the_page_is_cut_and_not_lost(made):
    forecast = Forecast(date(2026, 10, 5), 205.0, date(2031, 1, 6), 190.0, None, None, "it falls below 190 in 2031")
    course = Course("snr", "sphere-170", state="in control", forecast=forecast)
    sessions = made.sessions(8, only=("snr",))
    page, figures, _ = lay_out_scanner(made.content(sessions, courses=(course,)))
    assert b"2031" not in figures["trend-1"]
    assert {n.name: n.text for n in page.trends[0].notes}["Forecast"] == "it falls below 190 in 2031"


def test_displacements_are_drawn_with_their_exaggeration_said():
    grid = np.array([(20.0 * i, 20.0 * j) for i in range(-5, 6) for j in range(-5, 6) if i * i + j * j <= 25])
    moved = grid + 0.4 * np.array([1.0, -0.5]) * (grid[:, :1] / 100)
    svg, caption = draw_displacements(grid, moved)
    assert f"of {len(grid)} rods" in caption
    assert "0.45\u2009mm" in caption
    assert b"<svg" in svg
    rods = [{"i": 0, "j": 0, "true_mm": [float(x), float(y)], "measured_mm": [float(x) + 0.1, float(y)]} for x, y in grid]
    shown, _ = maps_of(Measurement("lattice_max", 0.1, "mm", 0.01, "m", 1, details={"rods": rods}), "map-1")
    assert "0.10\u2009mm" in shown.caption


def test_details_of_another_shape_are_left_alone():
    for details in (
        {"rods": "x"},
        {"rods": [{}]},
        {"rods": [{"true_mm": [0, 0]}]},
        {"profile": [1, 2]},
        {"profile": {"position_mm": [1]}},
    ):
        assert maps_of(Measurement("lattice_max", 0.1, "mm", 0.01, "m", 1, details=details), "map-1") is None


def test_the_profile_of_a_slice_is_drawn(made):
    position = [0.1 * n for n in range(-40, 41)]
    details = {
        "profile_mm": position,
        "profile": [1.0 if abs(p) < 2.5 else 0.0 for p in position],
        "full_width_tenth_maximum_mm": 5.4,
    }
    session = made.session(1, made.last_day, {"slice_thickness": ("mm", 5.0, 0.03, 4.3, 5.7, "5.0 ± 0.7 mm")})
    acquisition = session.acquisitions[0]
    measurement = dataclasses.replace(acquisition.judged[0].measurement, details=details)
    judged = (dataclasses.replace(acquisition.judged[0], measurement=measurement),)
    session = dataclasses.replace(session, acquisitions=(dataclasses.replace(acquisition, judged=judged),))
    page, figures, _ = lay_out_scanner(made.content([session]))
    assert page.trends[0].maps[0].caption.endswith("Full width at a tenth of it: 5.4\u2009mm.")
    assert b"position across the slice, mm" in figures["map-1"]


def test_sentences_lose_iso_dates_doubled_openings_and_stops(made):
    page, _, _ = lay_out_scanner(
        made.content((), standing="out of limits", standing_sentence="Out of limits: ghosting is 3 %, since 2026-09-07.")
    )
    assert page.standing_sentence == "Ghosting is 3 %, since 7 Sep 2026."
