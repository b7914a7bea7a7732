"""The images of a report: those of the latest session with their regions, and the last good beside the first bad."""

from collections.abc import Mapping
from types import MappingProxyType

from qa.records import Picture
from qa.report.content import Comparison, ScannerReport
from qa.report.numbers import long_date
from qa.report.page import Compared, Shown
from qa.report.picture import draw_picture, grey_window
from qa.report.streams import in_order
from qa.report.words import about, clipped

__all__ = ["Figures", "compare", "pictures", "region_words"]

Figures = dict[str, bytes]
"""SVG by the name that a page refers to it by."""

_PICTURE_MM = 87.0
_PAIR_MM = 74.0
_SEEN_IN_AIR = {"ghosting", "snr_background"}
_BRIGHTENED = 10
_REGIONS = {"M": "measurement region, M"}
_NOBODY: Mapping[tuple[str, int], str] = MappingProxyType({})


def compare(one: Comparison, name: str, figures: Figures) -> Compared:
    """Draw the last good and the first bad image in one grey scale; where air tells, it is brightened."""
    black, white = grey_window(one.good)
    remark = ""
    if one.quantity in _SEEN_IN_AIR:
        white, remark = black + (white - black) / _BRIGHTENED, f", {_BRIGHTENED} times brighter than usual"
    good, bad = (
        _shown(
            picture, f"{word}-{name}", f"{title}, {long_date(day)}", _PAIR_MM, figures, window=(black, white), remark=remark
        )
        for word, title, picture, day in (
            ("good", "Last good", one.good, one.good_day),
            ("bad", "First out", one.bad, one.bad_day),
        )
    )
    return Compared(good, bad)


def region_words(name: str) -> str:
    """Name a region as a key does."""
    return _REGIONS.get(name, name)


def _shown(
    picture: Picture, figure: str, title: str, largest_mm: float, figures: Figures, *,
    window: tuple[float, float] | None = None, remark: str = "", used_by: Mapping[tuple[str, int], str] = _NOBODY,
) -> Shown:  # fmt: skip
    drawn = draw_picture(picture, largest_mm, largest_mm, window)
    figures[figure] = drawn.svg
    entries = [(entry.number, region_words(entry.name), used_by.get((entry.name, picture.slice), "")) for entry in drawn.key]
    names = ", ".join(f"{number} {name}" for number, name, _ in entries)
    return Shown(
        title=clipped(title, 120),
        figure=figure,
        description=f"Image of slice {picture.slice}: {title}. Regions drawn: {names or 'none'}.",
        width_mm=drawn.width_mm,
        height_mm=drawn.height_mm,
        key=tuple(entries),
        caption=f"Slice {picture.slice}. Grey scale: {drawn.grey_scale}{remark}.",
    )


def _used_by(content: ScannerReport) -> dict[tuple[str, int], str]:
    """Say which quantities of the latest session each region, by name and slice, served."""
    found: dict[tuple[str, int], list[str]] = {}
    for session in content.sessions[-1:]:
        for acquisition in session.acquisitions:
            for judged in in_order(acquisition.judged):
                for region in judged.measurement.regions:
                    titles = found.setdefault((region.name, region.slice), [])
                    title = about(judged.measurement.quantity).title
                    if title not in titles:
                        titles.append(title)
    return {key: "; ".join(titles) if len(titles) < 4 else f"{len(titles)} quantities" for key, titles in found.items()}


def pictures(content: ScannerReport, figures: Figures) -> tuple[Shown, ...]:
    """Draw the images of the latest session, numbered as the notes of the quantities name them."""
    used_by = _used_by(content)
    return tuple(
        _shown(picture, f"picture-{number}", f"Image {number}: {picture.title}", _PICTURE_MM, figures, used_by=used_by)
        for number, picture in enumerate(content.pictures, start=1)
    )
