"""The commissioning report: evidence, for the file, that this installation measures what it says it measures."""

from dataclasses import dataclass
from datetime import date, datetime
from typing import cast, get_args

from qa.errors import UsageError
from qa.report.commission_content import CampaignResult, Case, CommissionResult, Figure, Tally
from qa.report.commission_plots import draw_errors
from qa.report.commission_words import TallyLine, commission_document, missed_words, missing_words, tally_line
from qa.report.content import CAUTIONS, PageSize
from qa.report.data import AttachedFile
from qa.report.figures_json import to_json
from qa.report.numbers import long_date
from qa.report.page import Fact
from qa.report.render import fill_template, to_pdf
from qa.report.scanner import page_identifier
from qa.report.words import count_of

__all__ = ["page_size", "render_commission_report"]

_WIDTH_MM = {"A4": 210.0 - 32.0, "Letter": 215.9 - 32.0}
_MODEL_ONLY = (
    "Digital scans show how the software measures, not how a scanner performs: they hold only what the model of the scanner "
    "holds, and stand beside, not in the place of, scans of the department's own phantoms."
)
_OWN_CAUTIONS = (
    _MODEL_ONLY,
    "Commission again after an update of the software, of Python, numpy or scipy, or on another machine.",
)
_RANGES = (
    "Rotation \u00b110\u00b0, tilt \u00b12\u00b0, off-centre \u00b115 mm; signal-to-noise ratio 30 to 500; pixels 0.7 to "
    "1.5 mm, up to 20 % apart in x and y; one to sixteen channels; shading 5 to 40 %; half with a ghost of up to 4 %; "
    "axial, coronal, sagittal and oblique. In half the scans the scanner is a little off besides: scale up to 1 %, gradients "
    "bent by up to 1 mm at 100 mm, gain drifting by up to 0.5 % between repeats, soft slice edges, field up to 20 ppm off."
)


@dataclass(frozen=True)
class ErrorChart:
    """The errors of one line of the table: heading, figure, and the figure in words."""

    title: str
    part: str
    figure: str
    description: str
    note: str


@dataclass(frozen=True)
class CampaignPage:
    """One phantom: its table, what was not measured, and the charts."""

    phantom: str
    sentence: str
    lines: tuple[TallyLine, ...]
    not_measured: tuple[Fact, ...]
    remarks: tuple[Fact, ...]
    charts: tuple[ErrorChart, ...]


@dataclass(frozen=True)
class CommissionPage:
    """Everything the template places."""

    title: str
    running_title: str
    created: str
    as_of: str
    outcome: str
    mark: str
    sentence: str
    missed: tuple[str, ...]
    facts: tuple[Fact, ...]
    campaigns: tuple[CampaignPage, ...]
    bars: tuple[Fact, ...]
    provenance: tuple[Fact, ...]
    cautions: tuple[str, ...]


def page_size(name: str) -> PageSize:
    """Read the name of a paper size.

    Raises
    ------
    UsageError
        It is neither A4 nor Letter.
    """
    for size in get_args(PageSize):
        if name.lower() == size.lower():
            return cast("PageSize", size)
    raise UsageError(f"--page: {name!r} is not a paper size: it must be A4 or Letter.")


def render_commission_report(result: CommissionResult, as_of: date | None = None, page: PageSize = "A4") -> bytes:
    """Make the dated evidence of a commissioning run.

    Parameters
    ----------
    result : CommissionResult
        The run.
    as_of : datetime.date, optional
        The day it is dated with; today where not given.
    page : str
        "A4" or "Letter".

    Returns
    -------
    bytes
        PDF/A-3a, with every figure of every case attached as JSON. The same run and day give the same bytes.

    Raises
    ------
    qa.errors.FaultError
        This installation lacks a library or a template.
    """
    as_of = datetime.now().astimezone().date() if as_of is None else as_of
    figures: dict[str, bytes] = {}
    document = to_json(commission_document(result)).encode()
    attached = (AttachedFile("commission.json", "Every figure of every digital scan, beside its true value", document),)
    laid_out = _lay_out(result, as_of, _WIDTH_MM[page], figures, attached[0])
    html = fill_template("commission.html", page=laid_out)
    identifier = page_identifier(laid_out, figures, attached)
    return to_pdf(html, figures, identifier, f"@page {{ size: {page} }}", attached=attached, as_of=as_of)


def _lay_out(
    result: CommissionResult, as_of: date, width_mm: float, figures: dict[str, bytes], attached: AttachedFile
) -> CommissionPage:
    missed = [(c, t) for c in result.campaigns for t in c.tallies if t.met is False]
    judged = sum(t.met is not None for c in result.campaigns for t in c.tallies)
    scans = sum(len(c.cases) for c in result.campaigns)
    lines = f"{count_of(judged, 'line')} of the tables below that can be judged"
    over = f"over {count_of(scans, 'digital scan')}"
    sentence = f"{len(missed)} of the {lines} missed a bar, {over}." if missed else f"All {lines} met their bars, {over}."
    return CommissionPage(
        title=f"Commissioning report: Evenfield {result.software_version}, {long_date(as_of)}",
        running_title=f"Commissioning \u00b7 Evenfield {result.software_version}",
        created=as_of.isoformat(),
        as_of=long_date(as_of),
        outcome="Bars missed" if missed else "Every bar met",
        mark="fail" if missed else "pass",
        sentence=sentence,
        missed=tuple(f"{c.phantom}: {_heading(t)}: {missed_words(t)}" for c, t in missed),
        facts=(
            Fact("Software", f"Evenfield {result.software_version}"),
            Fact("Machine", ", ".join(f"{name} {value}" for name, value in result.machine.items())),
            Fact("Scans", f"{scans}, drawn at random, each reproduced by its seed"),
            Fact("Ranges", _RANGES),
        ),
        campaigns=tuple(_campaign(c, number, width_mm, figures) for number, c in enumerate(result.campaigns, start=1)),
        bars=_bars(result),
        provenance=(
            *(Fact("Phantom definition", f"{c.phantom}, SHA-256 {c.phantom_sha256}") for c in result.campaigns),
            Fact("Attached", f"{attached.name}, SHA-256 {attached.sha256}"),
            Fact(
                "One case again",
                f"evenfield commission --phantom {result.campaigns[0].phantom} --seed SEED, the seed being one of the tables'",
            ),
        ),
        cautions=(*_OWN_CAUTIONS, *CAUTIONS),
    )


def _heading(tally: Tally) -> str:
    return f"{tally.title}, {tally.part}" if tally.part else tally.title


def _campaign(campaign: CampaignResult, number: int, width_mm: float, figures: dict[str, bytes]) -> CampaignPage:
    last = campaign.first_seed + len(campaign.cases) - 1
    return CampaignPage(
        phantom=campaign.phantom,
        sentence=f"{count_of(len(campaign.cases), 'scan')}, seeds {campaign.first_seed} to {last}.",
        lines=tuple(tally_line(tally) for tally in campaign.tallies),
        not_measured=tuple(
            Fact(reason[:1].upper() + reason[1:], names) for reason, names in missing_words(campaign, _heading)
        ),
        remarks=tuple(Fact(_heading(tally), tally.remark) for tally in campaign.tallies if tally.remark),
        charts=_charts(campaign, number, width_mm, figures),
    )


def _charts(campaign: CampaignResult, number: int, width_mm: float, figures: dict[str, bytes]) -> tuple[ErrorChart, ...]:
    """Draw a chart for every line in which something was estimated."""
    found: dict[str, list[tuple[Case, Figure]]] = {}
    for case in campaign.cases:
        for figure in case.figures:
            found.setdefault(figure.row, []).append((case, figure))
    charts = []
    for at, tally in enumerate(campaign.tallies, start=1):
        held = found.get(tally.row, [])
        if not any(figure.error for _, figure in held):
            continue
        name = f"errors-{number}-{at}"
        figures[name] = draw_errors(tally, held, width_mm)
        line = tally_line(tally)
        words = f"{count_of(len(held), 'case')}, bias {line.bias}, 95 % point {line.point} {line.unit}".rstrip()
        charts.append(
            ErrorChart(
                title=tally.title,
                part=tally.part,
                figure=name,
                description=f"Errors of {_heading(tally)} on {campaign.phantom}: {words}.",
                note=f"{words}, coverage {line.coverage}" if tally.coverage is not None else words,
            )
        )
    return tuple(charts)


def _bars(result: CommissionResult) -> tuple[Fact, ...]:
    """Say in words what each bar is, once."""
    held: dict[str, list[str]] = {}
    for campaign in result.campaigns:
        for tally in campaign.tallies:
            if tally.bar_words:
                bias = f"bias at most {tally.bias_bar:g} {tally.unit}, " if tally.bias_bar is not None else ""
                names = held.setdefault(f"{bias}95 % of the cases within {tally.bar_words}", [])
                if _heading(tally) not in names:
                    names.append(_heading(tally))
    return tuple(Fact("; ".join(names), bar) for bar, names in held.items())
