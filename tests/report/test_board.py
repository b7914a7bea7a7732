import dataclasses
import html
import importlib.util
import json
import re
import shutil
from datetime import timedelta

import pytest

from qa.errors import FaultError, UsageError
from qa.report.board import Board, BoardScanner, SessionImage, inline_svg, write_board
from qa.report.content import RefusedSeries
from qa.report.fleet_content import Episode, FleetReport, FleetScanner, Week, mondays

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
BROWSER = CHROMIUM and importlib.util.find_spec("playwright") and importlib.util.find_spec("axe_playwright_python")
NASTY = "<script>alert(1)</script><img src=x onerror=alert(2)>\"'</script>"


def fleet_of(made, names, first):
    weeks = tuple(
        Week(monday, "out of limits" if n % 9 == 8 else "within limits")
        for n, monday in enumerate(mondays(first, made.last_day))
    )
    episode = Episode("", "ghosting", "sphere-170", "%", first, None, 3, 2.9, 0.12, "at most 2.5 %", "a gradient amplifier")
    standings = ("out of limits", "within limits", "overdue")
    scanners = tuple(
        FleetScanner(
            name, "Meridian, 3 T", standings[n % 3], "In words.", made.last_day - timedelta(days=n),
            made.last_day + timedelta(days=7 - n), 52, 50 - n, (), weeks,
            (dataclasses.replace(episode, scanner=name),) if n % 3 == 0 else (),
        )
        for n, name in enumerate(names)
    )  # fmt: skip
    return FleetReport("Saltmarsh Imaging", first, made.last_day, scanners, "0.1.0", 3, "c4" * 32, "9f" * 32, made.last_day)


def picture(made, day):
    return SessionImage(day, made.picture(rows=64, columns=64, pixel_mm=(3.9, 3.9)))


@pytest.fixture(scope="module")
def board(made):
    rich = made.rich(12, comparisons=())
    images = tuple(picture(made, made.last_day - timedelta(days=7 * n)) for n in range(3))
    other = made.content((), scanner="east-1t5", standing="overdue", standing_sentence="Nothing is on record.")
    names = ("north-3t", "west-3t", "east-1t5")
    return Board(fleet_of(made, names, rich.first_day), (BoardScanner(rich, images), BoardScanner(other)))


@pytest.fixture(scope="module")
def site(board, tmp_path_factory):
    folder = tmp_path_factory.mktemp("board") / "site"
    assert write_board(folder, board) == folder / "index.html"
    return folder


def references(text):
    return [html.unescape(found) for found in re.findall(r'(?:src|href)="([^"#]+)"', text)] + re.findall(
        r'url\("([^"]+)"\)', text
    )


def test_the_site_is_complete_and_asks_nothing_of_anyone(site):
    for path in (*site.glob("*.html"), site / "board.css"):
        for name in references(path.read_text()):
            assert not re.match(r"[a-z]+:|//", name), (path.name, name)
            assert (site / name).is_file(), (path.name, name)
    script = (site / "board.js").read_text()
    assert not re.search(r"fetch\(|XMLHttpRequest|import |https?:", script)


def test_every_scanner_with_content_has_its_page_and_the_fleet_links_to_it(site):
    index = (site / "index.html").read_text()
    assert 'href="scanner-north-3t.html"' in index
    assert 'href="scanner-east-1t5.html"' in index
    assert "scanner-west-3t.html" not in index
    assert "No session of this scanner is on record in this period." in (site / "scanner-east-1t5.html").read_text()


def test_every_point_of_a_chart_says_its_session(site, board):
    page = (site / "scanner-north-3t.html").read_text()
    charts = [json.loads(found) for found in re.findall(r'<script type="application/json">(\[\[[\d.]+, .*?)</script>', page)]
    assert len(charts) == 14
    assert all(len(chart) == 12 for chart in charts)
    assert all(0 < x < 100 and 0 < y < 100 for chart in charts for x, y, _ in chart)
    value = board.scanners[0].report.sessions[-1].acquisitions[0].judged[0].measurement.value
    assert charts[0][-1][2].startswith(f"23 Nov 2026: {value:.1f}\u2009±\u20093.8")


def test_a_board_is_written_anew_in_place_and_drops_scanners_that_are_gone(board, tmp_path):
    folder = tmp_path / "site"
    write_board(folder, board)
    before = (folder / "scanner-north-3t.html").read_bytes()
    write_board(folder, dataclasses.replace(board, scanners=board.scanners[:1]))
    assert (folder / "scanner-north-3t.html").read_bytes() == before
    assert not (folder / "scanner-east-1t5.html").exists()
    assert not list(folder.rglob("*.part"))


def test_a_folder_with_something_else_in_it_is_left_alone(board, tmp_path):
    (tmp_path / "thesis.txt").write_text("three years of work")
    with pytest.raises(UsageError, match="not empty and holds no board"):
        write_board(tmp_path, board)
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.txt"]


def test_a_file_in_the_way_is_one_sentence(board, tmp_path):
    (tmp_path / "site").write_text("a file")
    with pytest.raises(FaultError, match=r"The board .* was not written: a file stands where the folder should be"):
        write_board(tmp_path / "site", board)


def test_names_that_come_to_one_file_name_get_a_page_each(made, tmp_path):
    contents = [made.content((), scanner=name) for name in ("a b", "a-b", "A b")]
    fleet = fleet_of(made, [c.scanner for c in contents], contents[0].first_day)
    write_board(tmp_path / "site", Board(fleet, tuple(BoardScanner(c) for c in contents)))
    assert len(list((tmp_path / "site").glob("scanner-*.html"))) == 3


def nasty_board(made):
    session = made.session(
        1, made.last_day, {"snr": made.steady["snr"]}, header=dataclasses.replace(made.header, model=NASTY),
        settings=dataclasses.replace(made.settings, protocol=NASTY), remarks=(NASTY,),
    )  # fmt: skip
    nasty = made.picture(rows=32, columns=32, pixel_mm=(7.8, 7.8), title=NASTY)
    report = made.content(
        [session], scanner=NASTY, department=NASTY, description=NASTY, standing_sentence=NASTY, pictures=(nasty,),
        refused=(RefusedSeries(made.last_day, NASTY, NASTY),),
    )  # fmt: skip
    fleet = dataclasses.replace(fleet_of(made, [NASTY], report.first_day), department=NASTY)
    return Board(fleet, (BoardScanner(report, (SessionImage(made.last_day, nasty),)),))


def test_what_a_header_says_is_text_and_nothing_else(made, tmp_path):
    write_board(tmp_path / "site", nasty_board(made))
    for path in (tmp_path / "site").glob("*.html"):
        text = path.read_text()
        assert "<script>alert" not in text
        assert "<img src=x" not in text
        assert "&lt;script&gt;alert(1)" in text


def test_charts_lose_names_and_take_the_inks_of_the_theme():
    svg = (
        b'<?xml version="1.0"?>\n<svg xmlns="x" width="1pt" height="2pt" viewBox="0 0 1 2">'
        b'<g id="patch_1" style="fill: #17466b"/></svg>'
    )
    assert inline_svg(svg) == (
        '<svg xmlns="x" aria-hidden="true" focusable="false" viewBox="0 0 1 2"><g style="fill: var(--data)"/></svg>'
    )


@pytest.fixture(scope="module")
def browser():
    from playwright.sync_api import sync_playwright

    with sync_playwright() as driver:
        chromium = driver.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield chromium
        chromium.close()


@pytest.fixture
def look(browser, site):
    """Open a page of the board; whatever the console says or fails to load is an error at the end."""
    complaints, contexts = [], []

    def opened(name, **options):
        context = browser.new_context(viewport={"width": 1280, "height": 900}, **options)
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda message: complaints.append(message.text))
        page.on("pageerror", lambda error: complaints.append(str(error)))
        page.on("requestfailed", lambda request: complaints.append(request.url))
        page.on("request", lambda request: complaints.append(request.url) if not request.url.startswith("file:") else None)
        page.goto((site / name).as_uri())
        return page

    yield opened
    for context in contexts:
        context.close()
    assert complaints == []


needs_browser = pytest.mark.skipif(not BROWSER, reason="no Chromium, Playwright or axe here")


@needs_browser
@pytest.mark.parametrize("name", ["index.html", "scanner-north-3t.html", "scanner-east-1t5.html"])
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_axe_finds_no_violation(look, name, scheme):
    from axe_playwright_python.sync_playwright import Axe

    page = look(name, color_scheme=scheme)
    found = Axe().run(page, options={"preload": False}).response["violations"]
    assert [(v["id"], [n["html"][:120] for n in v["nodes"][:3]]) for v in found] == []


@needs_browser
def test_the_slider_and_the_pointer_read_out_a_session(look):
    page = look("scanner-north-3t.html")
    chart = page.locator("[data-chart]").first
    slider, output = chart.locator("input"), chart.locator("output")
    slider.focus()
    page.keyboard.press("ArrowLeft")
    assert output.inner_text().startswith("16 Nov 2026: ")
    assert slider.get_attribute("aria-valuetext") == output.inner_text()
    assert chart.locator(".cursor").is_visible()
    box = chart.locator(".plot").bounding_box()
    page.mouse.move(box["x"] + 0.11 * box["width"], box["y"] + box["height"] / 2)
    assert output.inner_text().startswith("7 Sep 2026: ")


@needs_browser
def test_the_keyboard_reaches_everything(look):
    page = look("scanner-north-3t.html")
    expected = page.evaluate(
        "document.querySelectorAll('a[href], button, input:not([hidden] *), select, [tabindex=\"0\"]').length"
    )
    seen = set()
    for _ in range(expected + 2):
        page.keyboard.press("Tab")
        seen.add(page.evaluate("Array.from(document.querySelectorAll('*')).indexOf(document.activeElement)"))
    assert len(seen) >= expected


@needs_browser
def test_the_table_sorts_and_filters(look):
    page = look("index.html")
    rows = (
        "Array.from(document.querySelectorAll('#overview tbody tr')).filter(r => !r.hidden).map(r => r.cells[0].dataset.key)"
    )
    assert page.evaluate(rows) == ["north-3t", "east-1t5", "west-3t"]
    page.get_by_role("button", name="Scanner").click()
    assert page.evaluate(rows) == ["east-1t5", "north-3t", "west-3t"]
    page.get_by_role("button", name="Sessions made").click()
    assert page.evaluate(rows) == ["east-1t5", "west-3t", "north-3t"]
    page.get_by_role("button", name="Sessions made").press("Enter")
    assert page.evaluate(rows) == ["north-3t", "west-3t", "east-1t5"]
    page.get_by_label("Find").fill("west")
    assert page.evaluate(rows) == ["west-3t"]
    page.get_by_label("Find").fill("")
    page.locator("#standing").select_option("overdue")
    assert page.evaluate(rows) == ["east-1t5"]
    assert page.locator("#found").inner_text() == "1 of 3 shown"


@needs_browser
def test_the_album_runs_through_the_sessions(look):
    page = look("scanner-north-3t.html")
    album = page.locator("[data-album]").first
    album.locator("input").focus()
    page.keyboard.press("Home")
    assert album.locator("output").inner_text() == "9 Nov 2026"
    assert album.locator("img").get_attribute("src").endswith("2026-11-09.svg")
    assert "9 Nov 2026" in album.locator("img").get_attribute("alt")


@needs_browser
def test_it_prints(look, tmp_path):
    from pypdf import PdfReader

    page = look("scanner-north-3t.html")
    page.emulate_media(media="print")
    page.pdf(path=tmp_path / "p.pdf", prefer_css_page_size=True)
    reader = PdfReader(tmp_path / "p.pdf")
    assert 3 <= len(reader.pages) <= 12
    assert "Cautions" in reader.pages[-1].extract_text()


@needs_browser
def test_nothing_in_a_name_runs(browser, made, tmp_path):
    write_board(tmp_path / "site", nasty_board(made))
    page = browser.new_page()
    ran = []
    page.on("dialog", lambda dialog: (ran.append(dialog.message), dialog.dismiss()))
    for path in sorted((tmp_path / "site").glob("*.html")):
        page.goto(path.as_uri())
    page.close()
    assert ran == []
