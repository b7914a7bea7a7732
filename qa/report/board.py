"""The board: the reports' content as a static web site for a wall screen, the intranet or a file share.

Plain HTML, CSS and a little JavaScript, with everything it needs beside it: it asks no server for anything.
"""

import contextlib
import re
import tempfile
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from qa.disk import why_not_written
from qa.errors import FaultError, UsageError
from qa.records import Picture
from qa.report import style
from qa.report.content import ScannerReport
from qa.report.files import file_stem
from qa.report.fleet import lay_out_fleet
from qa.report.fleet_content import FleetReport
from qa.report.images import region_words
from qa.report.numbers import long_date
from qa.report.picture import draw_picture
from qa.report.render import fill_template
from qa.report.scanner import lay_out_scanner
from qa.report.streams import History, histories
from qa.report.trend import point_places
from qa.report.words import value_words
from qa.resources import shipped_folder

__all__ = ["Board", "BoardScanner", "SessionImage", "write_board"]

_MARKER = ".evenfield-board"
_WIDTH_MM = 178.0
_IMAGE_MM = 115.0
_ASSETS = ("board.css", "board.js")
_INKS = {
    style.INK: "var(--ink)",
    style.GREY: "var(--faint)",
    style.FAINT: "var(--line)",
    style.MISSED: "var(--missed)",
    style.BAND: "var(--band)",
    style.DATA: "var(--data)",
    style.LIMIT: "var(--limit)",
    "#ffffff": "var(--paper)",
}


_DARK = {
    style.INK: "#e9edf1",
    style.GREY: "#a3adb8",
    style.BAND: "#1d3446",
    style.DATA: "#8fc1e6",
    style.LIMIT: "#f0948c",
    "#fff": "#12161a",
}
_MM_PER_PIXEL = 25.4 / 96


@dataclass(frozen=True, eq=False)
class SessionImage:
    """One image of one session."""

    day: date
    picture: Picture


@dataclass(frozen=True, eq=False)
class BoardScanner:
    """What the board shows of one scanner: its report's content, and images of its sessions in order of day."""

    report: ScannerReport
    images: tuple[SessionImage, ...] = ()


@dataclass(frozen=True, eq=False)
class Board:
    """What the board shows: the fleet, and each scanner."""

    fleet: FleetReport
    scanners: tuple[BoardScanner, ...]


@dataclass(frozen=True)
class LiveChart:
    """A chart in the page, and for each point its place and what it says."""

    svg: str
    points: tuple[tuple[float, float, str], ...]


@dataclass(frozen=True)
class Album:
    """Images of one kind over the sessions, the latest last: file, day and alternative text of each; size in pixels."""

    title: str
    images: tuple[tuple[str, str, str], ...]
    key: tuple[tuple[int, str], ...]
    width: int
    height: int


@dataclass(frozen=True)
class Link:
    """A page of a scanner."""

    name: str
    href: str


def inline_svg(svg: bytes) -> str:
    """Prepare one of the reports' own charts to stand in a page: no names that could occur twice, inks by theme."""
    text = svg.decode()
    text = text[text.index("<svg ") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r"<defs>.*?</defs>", "", text, count=1, flags=re.DOTALL)
    text = re.sub(r' id="[a-z]+_\d+"', "", text)
    text = re.sub(r'(<svg [^>]*?) width="[^"]*" height="[^"]*"', r'\1 aria-hidden="true" focusable="false"', text, count=1)
    for ink, name in _INKS.items():
        text = text.replace(ink, name)
    return text


def _alone(svg: bytes) -> bytes:
    """Let a figure that stands alone, where the reports' font cannot reach it, fall back on the reader's own."""
    return svg.replace(f"'{style.FONT_FAMILY}'".encode(), f"'{style.FONT_FAMILY}', sans-serif".encode())


def _darkened(mark: bytes) -> bytes:
    """Give a mark the inks of the dark theme."""
    for ink, dark in _DARK.items():
        mark = mark.replace(ink.encode(), dark.encode())
    return mark


def _said(history: History) -> list[str]:
    """Say of each point of a chart what it is."""
    said = []
    for point in history.chart.points:
        words = value_words(point.value, point.expanded, history.quantity, history.chart.unit)
        text = f"{long_date(point.at.date())}: {words}, {point.mark}"
        said.append(text + ("; a control rule tripped" if point.tripped else ""))
    return said


def _live(history: History, svg: bytes) -> LiveChart:
    places = point_places(history.chart, _WIDTH_MM)
    points = tuple((round(100 * x, 2), round(100 * y, 2), text) for (x, y), text in zip(places, _said(history), strict=True))
    return LiveChart(inline_svg(svg), points)


def _albums(scanner: BoardScanner, folder: Path, stem: str) -> tuple[Album, ...]:
    """Draw images of sessions into a folder, grouped by title, so that one slider runs through each kind."""
    groups: dict[str, list[SessionImage]] = {}
    for image in scanner.images:
        groups.setdefault(image.picture.title, []).append(image)
    albums = []
    for number, (title, images) in enumerate(groups.items(), start=1):
        shown: list[tuple[str, str, str]] = []
        key: tuple[tuple[int, str], ...] = ()
        size = (0, 0)
        for image in sorted(images, key=lambda i: i.day):
            drawn = draw_picture(image.picture, _IMAGE_MM, _IMAGE_MM)
            name = f"{number}-{image.day.isoformat()}.svg"
            _write(folder / "images" / stem / name, _alone(drawn.svg))
            key = tuple((entry.number, region_words(entry.name)) for entry in drawn.key)
            size = round(drawn.width_mm / _MM_PER_PIXEL), round(drawn.height_mm / _MM_PER_PIXEL)
            words = f"{title}, session of {long_date(image.day)}"
            shown.append((f"images/{stem}/{name}", long_date(image.day), words))
        albums.append(Album(title, tuple(shown), key, *size))
    return tuple(albums)


def _write(path: Path, content: bytes) -> None:
    """Put a file in place complete or not at all; who reads the old one meanwhile is not disturbed."""
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary: Path | None = None
    try:
        with tempfile.NamedTemporaryFile(dir=path.parent, prefix=".", suffix=".part", delete=False) as file:
            temporary = Path(file.name)
            file.write(content)
        temporary.chmod(0o644)
        temporary.replace(path)
    finally:
        if temporary is not None:
            with contextlib.suppress(OSError):
                temporary.unlink(missing_ok=True)


def _claim(folder: Path) -> None:
    """Make the folder a board's own; another folder that holds something is left alone."""
    folder.mkdir(parents=True, exist_ok=True)
    if not (folder / _MARKER).exists():
        if any(folder.iterdir()):
            raise UsageError(f"The folder {folder} is not empty and holds no board: give an empty or a new folder.")
        (folder / _MARKER).write_text("A board of evenfield; everything beside this file is written anew each time.\n")


def _links(names: Iterable[str]) -> dict[str, Link]:
    """Name each scanner's page; two names that come to the same file name are told apart by a number."""
    links: dict[str, Link] = {}
    taken: set[str] = set()
    for name in names:
        stem = file_stem(name)
        file, number = stem, 1
        while file.casefold() in taken:
            number += 1
            file = f"{stem}_{number}"
        taken.add(file.casefold())
        links[name] = Link(name, f"scanner-{file}.html")
    return links


def _scanner_page(scanner: BoardScanner, folder: Path, link: Link) -> bytes:
    report = scanner.report
    page, figures, _ = lay_out_scanner(report)
    found = histories(report)
    charts = {trend.figure: _live(history, figures[trend.figure]) for trend, history in zip(page.trends, found, strict=True)}
    inlined = {
        name: inline_svg(svg).replace('aria-hidden="true"', "", 1) for name, svg in figures.items() if name.startswith("map-")
    }
    sparks = {name: inline_svg(svg) for name, svg in figures.items() if name.startswith("spark-")}
    stem = link.href.removeprefix("scanner-").removesuffix(".html")
    for shown in page.pictures:
        _write(folder / "images" / stem / f"{shown.figure}.svg", _alone(figures[shown.figure]))
    html = fill_template(
        "board/scanner.html",
        page=page,
        charts=charts,
        maps=inlined,
        sparks=sparks,
        albums=_albums(scanner, folder, stem),
        images=f"images/{stem}",
    )
    return html.encode(errors="replace")


def write_board(folder: Path, board: Board) -> Path:
    """Write the board.

    Files are put in place one by one, each complete; the fleet's page comes last. What the folder held of an earlier board is
    written over, files of other programs are not touched.

    Parameters
    ----------
    folder : pathlib.Path
        A new or empty folder, or one that holds an earlier board.
    board : Board
        Finished data.

    Returns
    -------
    pathlib.Path
        The page to open first.

    Raises
    ------
    UsageError
        The folder holds something that is no board.
    FaultError
        The disk is full, permission is missing, or the system failed otherwise.
    """
    index = folder / "index.html"
    try:
        _claim(folder)
        templates = shipped_folder("templates")
        for name in _ASSETS:
            _write(folder / name, (templates / "board" / name).read_bytes())
        for path in sorted((templates / "fonts").iterdir()):
            _write(folder / "fonts" / path.name, path.read_bytes())
        for path in sorted((templates / "marks").iterdir()):
            mark = path.read_bytes()
            _write(folder / "marks" / path.name, mark)
            _write(folder / "marks" / f"dark-{path.name}", _darkened(mark))
        links = _links(scanner.report.scanner for scanner in board.scanners)
        for path in folder.glob("scanner-*.html"):
            if path.name not in {link.href for link in links.values()}:
                path.unlink()
        for scanner in board.scanners:
            link = links[scanner.report.scanner]
            _write(folder / link.href, _scanner_page(scanner, folder, link))
        page, _ = lay_out_fleet(board.fleet)
        _write(index, fill_template("board/index.html", page=page, links=links).encode(errors="replace"))
    except OSError as error:
        raise FaultError(f"The board {folder} was not written: {why_not_written(error)}.") from error
    return index
