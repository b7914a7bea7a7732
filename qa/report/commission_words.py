"""A commissioning run in words: lines of its table, one case, and the JSON document."""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from qa.quantities import QUANTITIES
from qa.report.commission_content import CampaignResult, Case, CommissionResult, Figure, Tally
from qa.report.numbers import MINUS, rounded, typeset_unit
from qa.report.terminal import table_text
from qa.report.words import count_of

__all__ = [
    "TallyLine",
    "case_text",
    "commission_document",
    "commission_table",
    "commission_text",
    "missed_words",
    "missing_words",
    "tally_line",
]

_NONE = "\u2013"


@dataclass(frozen=True)
class TallyLine:
    """One line of the table: every cell in words, and the verdict's mark ("pass", "fail", "no-limit")."""

    name: str
    title: str
    part: str
    unit: str
    cases: str
    measured: str
    bias: str
    bias_bar: str
    point: str
    bar: str
    share: str
    limit: str
    coverage: str
    coverage_range: str
    worst: str
    worst_seed: str
    verdict: str
    mark: str


def _number(value: float | None, significant: int = 3) -> str:
    """Write a number with a few significant digits, never as a power of ten unless it is tiny."""
    if value is None:
        return _NONE
    if value == 0:
        return "0"
    places = max(0, significant - 1 - math.floor(math.log10(abs(value))))
    text = f"{value:.{places}f}" if places <= 7 else f"{value:.{significant - 1}e}"
    return text.replace("-", MINUS)


def _percent(share: float | None, decimals: int = 1) -> str:
    return _NONE if share is None else f"{100 * share:.{decimals}f} %"


def _span(low: float, high: float) -> str:
    first, last = _number(low, 2), _number(high, 2)
    return first if first == last else f"{first} to {last}"


def missed_words(tally: Tally) -> str:
    """Name the bars that were missed: bias, 95 % point, coverage."""
    named = (("bias", tally.bias_met), ("95 % point", tally.point_met), ("coverage", tally.coverage_met))
    return ", ".join(name for name, met in named if met is False)


def tally_line(tally: Tally) -> TallyLine:
    """Write one line of the table; bias stands with its expanded uncertainty (k = 2)."""
    if tally.bias is None:
        bias = _NONE
    else:
        value, spread = rounded(tally.bias, 2 * (tally.u_bias or 0.0), 3)
        bias = f"{value} \u00b1 {spread}" if spread else value
    missed = missed_words(tally)
    interval = tally.coverage_range
    return TallyLine(
        name=tally.quantity,
        title=tally.title,
        part=tally.part,
        unit=typeset_unit(tally.unit),
        cases=str(tally.cases),
        measured=str(tally.measured),
        bias=bias,
        bias_bar=_NONE if tally.bias_bar is None else f"{tally.bias_bar:g}",
        point=_number(tally.point) if tally.point is not None or not tally.cases else "not reached",
        bar=_NONE if tally.allowed is None else _span(*tally.allowed),
        share=_percent(tally.share),
        limit=_number(tally.limit, 2),
        coverage=_percent(tally.coverage),
        coverage_range=_NONE if interval is None else f"{100 * interval[0]:.1f} to {100 * interval[1]:.1f} %",
        worst=_NONE if tally.worst is None else _number(tally.worst.error),
        worst_seed=_NONE if tally.worst_seed is None else str(tally.worst_seed),
        verdict=_NONE if tally.met is None else (f"missed: {missed}" if missed else "met"),
        mark="no-limit" if tally.met is None else ("fail" if missed else "pass"),
    )


def commission_text(result: CommissionResult, *, each_case: bool = False) -> str:
    """Write the run for a terminal: its tables, or, where asked for, every case by itself."""
    if each_case:
        return "\n".join(case_text(case) for campaign in result.campaigns for case in campaign.cases)
    return commission_table(result)


def commission_table(result: CommissionResult) -> str:
    """Write the run as plain tables, one a phantom, with what was not measured and why below each."""
    return "\n\n".join(_campaign_text(campaign) for campaign in result.campaigns) + "\n"


_HEADS: tuple[tuple[str, bool], ...] = (
    ("quantity", False),
    ("cases", True),
    ("bias \u00b1 U (k = 2)", True),
    ("bar", True),
    ("95 % point", True),
    ("bar", True),
    ("limit", True),
    ("within", True),
    ("unit", False),
    ("coverage", True),
    ("worst", True),
    ("seed", True),
    ("verdict", False),
)


def _campaign_text(campaign: CampaignResult) -> str:
    last = campaign.first_seed + len(campaign.cases) - 1
    head = f"{campaign.phantom}: {count_of(len(campaign.cases), 'case')}, seeds {campaign.first_seed} to {last}"
    rows = []
    for tally in campaign.tallies:
        line = tally_line(tally)
        cases = line.cases if line.cases == line.measured else f"{line.measured} of {line.cases}"
        rows.append(
            (
                tally.row, cases, line.bias, line.bias_bar, line.point, line.bar, line.limit, line.share, line.unit,
                line.coverage, line.worst, line.worst_seed, line.verdict,
            )
        )  # fmt: skip
    lines = [head, table_text(_HEADS, rows)]
    lines += [f"bar of {words}: {bar}" for bar, words in _bars(campaign.tallies)]
    lines += [f"not measured: {names}: {reason}" for reason, names in missing_words(campaign, lambda tally: tally.row)]
    lines += [f"{tally.row}: {tally.remark}" for tally in campaign.tallies if tally.remark]
    missed = [tally for tally in campaign.tallies if tally.met is False]
    if missed:
        lines.append(f"{count_of(len(missed), 'line')} missed a bar: {', '.join(tally.row for tally in missed)}")
    else:
        lines.append("every bar was met")
    return "\n".join(lines)


def missing_words(campaign: CampaignResult, name: Callable[[Tally], str]) -> list[tuple[str, str]]:
    """Say why something was not measured, in how many cases and in which first; and of what, by the names given."""
    held: dict[tuple[str, int, int], list[str]] = {}
    for tally in campaign.tallies:
        for missing in tally.missing:
            held.setdefault(missing, []).append(name(tally))
    return [
        (f"{reason} ({count_of(count, 'case')}, first with seed {seed})", "; ".join(names))
        for (reason, count, seed), names in held.items()
    ]


def _bars(tallies: Sequence[Tally]) -> list[tuple[str, str]]:
    """Bars that differ from case to case, and whose they are."""
    held: dict[str, list[str]] = {}
    for tally in tallies:
        if "limit" in tally.bar_words:
            held.setdefault(tally.bar_words, []).append(tally.row)
    return [(bar, ", ".join(names)) for bar, names in held.items()]


def case_text(case: Case) -> str:
    """Write one case: what was drawn, and every figure beside its true value."""
    settings = ", ".join(f"{name} {_setting(value)}" for name, value in case.settings.items() if value is not None)
    heads = (
        ("quantity", False),
        ("true", True),
        ("measured", True),
        ("U (k = 2)", True),
        ("error", True),
        ("bar", True),
        ("unit", False),
        ("error / u", True),
        ("", False),
    )
    rows = [_figure_row(figure) for figure in case.figures]
    lines = [f"{case.phantom}, seed {case.seed}", settings, table_text(heads, rows)]
    lines += [f"not measured: {one.quantity}: {one.reason}" for one in case.missing]
    if case.unjudged:
        lines.append(f"measured, though the model has no true value of it: {', '.join(case.unjudged)}")
    return "\n".join(lines) + "\n"


def _setting(value: Any) -> str:  # noqa: ANN401 - any plain value
    if isinstance(value, list | tuple):
        return " x ".join(_setting(one) for one in value)
    return f"{value:.5g}" if isinstance(value, float) else str(value)


def _figure_row(figure: Figure) -> tuple[str, ...]:
    places = QUANTITIES[figure.quantity].decimals if figure.quantity in QUANTITIES else 3
    value, spread = rounded(figure.measured, 2 * figure.standard_uncertainty, places)
    true, _ = rounded(figure.true, 2 * figure.standard_uncertainty, places)
    outside = figure.allowed is not None and abs(figure.error) > figure.allowed
    said = [word for word, is_so in (("outside its bar", outside), ("not covered", not figure.covered)) if is_so]
    known = figure.standard_uncertainty > 0
    return (
        figure.row,
        true,
        value,
        spread,
        _number(figure.error),
        _number(figure.allowed),
        typeset_unit(figure.unit),
        f"{figure.score:.1f}".replace("-", MINUS) if known else _NONE,
        ", ".join(said) if known else said[0] if outside else "",
    )


def commission_document(result: CommissionResult) -> dict[str, Any]:
    """Lay out what `evenfield commission --json` prints: plain values, never rounded."""
    return {
        "format": "evenfield-commission",
        "version": 1,
        "software": {"name": "evenfield", "version": result.software_version},
        "machine": dict(result.machine),
        "met": result.met,
        "campaigns": [
            {
                "phantom": campaign.phantom,
                "phantom_sha256": campaign.phantom_sha256,
                "first_seed": campaign.first_seed,
                "met": campaign.met,
                "quantities": [_tally(tally) for tally in campaign.tallies],
                "cases": [_case(case) for case in campaign.cases],
            }
            for campaign in result.campaigns
        ],
    }


def _tally(tally: Tally) -> dict[str, Any]:
    return {
        "quantity": tally.quantity,
        "part": tally.part,
        "unit": tally.unit,
        "cases": tally.cases,
        "measured": tally.measured,
        "bias": tally.bias,
        "bias_standard_uncertainty": tally.u_bias,
        "bias_bar": tally.bias_bar,
        "point_95": tally.point,
        "point_95_bar": tally.bar_words,
        "point_95_bar_range": tally.allowed,
        "share_within_bar": tally.share,
        "limit_95": tally.limit,
        "coverage": tally.coverage,
        "coverage_range": tally.coverage_range,
        "bias_met": tally.bias_met,
        "point_95_met": tally.point_met,
        "coverage_met": tally.coverage_met,
        "worst_seed": tally.worst_seed,
        "worst_error": None if tally.worst is None else tally.worst.error,
        "not_measured": [{"reason": reason, "cases": count, "seed": seed} for reason, count, seed in tally.missing],
        "remark": tally.remark,
    }


def _case(case: Case) -> dict[str, Any]:
    return {
        "seed": case.seed,
        "settings": dict(case.settings),
        "figures": [
            {
                "quantity": figure.quantity,
                "true": figure.true,
                "measured": figure.measured,
                "standard_uncertainty": figure.standard_uncertainty,
                "error": figure.error,
                "error_unit": figure.unit,
                "allowed": figure.allowed,
            }
            for figure in case.figures
        ],
        "not_measured": [{"quantity": one.quantity, "reason": one.reason} for one in case.missing],
    }
