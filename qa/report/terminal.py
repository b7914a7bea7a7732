"""What the commands print for a person: figures of one acquisition as a table, one line a scanner, what needs attention."""

import io
import sys
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from qa.quantities import QUANTITIES
from qa.records import Outcome, Refused, Verdict
from qa.report.numbers import COVERAGE_FACTOR, rounded

if TYPE_CHECKING:
    from rich.table import Table

    from qa.judge import Assessment

__all__ = ["attention_lines", "outcome_text", "refused_line", "status_table", "table_text", "taken_line"]


def _draw(table: "Table") -> str:
    """Lay a table out as plain lines: no wider than needed, in colourless text that a log can hold."""
    from rich.console import Console

    out = io.StringIO()
    encoding = getattr(sys.stdout, "encoding", None) or "utf-8"
    console = Console(file=out, width=400, no_color=True, highlight=False, markup=False, emoji=False)
    console.print(table)
    lines = (line.rstrip() for line in out.getvalue().rstrip().splitlines())
    return "\n".join(lines).encode(encoding, "replace").decode(encoding)


def table_text(heads: Sequence[tuple[str, bool]], rows: Iterable[Sequence[str]]) -> str:
    """Lay out a table.

    Parameters
    ----------
    heads : sequence of (str, bool)
        Column heads, and whether the column holds numbers.
    rows : iterable of sequence of str
        Cells.

    Returns
    -------
    str
        Lines without trailing blanks.
    """
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style=None)
    for head, is_number in heads:
        table.add_column(Text(head), justify="right" if is_number else "left", no_wrap=True)
    for row in rows:
        table.add_row(*(Text(_one_line(cell)) for cell in row))
    return _draw(table)


def _one_line(text: str) -> str:
    """Keep a text from a header from breaking out of its line or steering the terminal."""
    return "".join(c if c.isprintable() else "?" for c in text)


def outcome_text(outcome: Outcome) -> str:
    """Write the figures of one acquisition as a table, with what was not measured and why below it."""
    first = outcome.acquisition.first
    when = "date unknown" if first.acquired_at is None else f"{first.acquired_at:%Y-%m-%d %H:%M}"
    repeats = len(outcome.acquisition.repeats)
    echo = "" if first.settings.echo_ms is None else f", echo {first.settings.echo_ms:g} ms"
    head = (
        f"{first.description or 'unnamed series'}, {when}: {outcome.phantom}, {len(first.planes)} slices of "
        f"{first.settings.matrix[0]} x {first.settings.matrix[1]}, {repeats} repeat{'s' if repeats != 1 else ''}{echo}"
        + ("" if first.kind == "magnitude" else f", {first.kind}")
    )
    lines = [_one_line(head)]
    if outcome.measurements:
        rows = []
        for one in outcome.measurements:
            value, expanded = rounded(one.value, COVERAGE_FACTOR * one.standard_uncertainty, QUANTITIES[one.quantity].decimals)
            unit = "" if one.unit == "1" else one.unit
            rows.append((one.quantity, value, unit, expanded, "" if one.slice is None else str(one.slice), one.method))
        heads = (
            ("quantity", False),
            ("value", True),
            ("unit", False),
            ("U (k = 2)", True),
            ("slice", True),
            ("method", False),
        )
        lines.append(table_text(heads, rows))
    reasons: dict[str, list[str]] = {}
    for missing in outcome.not_measured:
        reasons.setdefault(missing.reason, []).append(missing.quantity)
    lines += [f"not measured: {', '.join(names)}: {_one_line(reason)}" for reason, names in reasons.items()]
    lines += [f"remark: {_one_line(text)}" for text in (*outcome.acquisition.remarks, *outcome.remarks)]
    return "\n".join(lines) + "\n"


def status_table(assessments: "Sequence[Assessment]") -> str:
    """Write the fleet, one line a scanner."""
    rows = [
        (
            one.scanner_name,
            one.standing,
            "never" if one.last_session is None else one.last_session.isoformat(),
            "" if one.due is None else one.due.isoformat(),
            ", ".join(one.out),
            ", ".join(one.drifting),
        )
        for one in assessments
    ]
    heads = ("scanner", "standing", "last session", "due", "out of limits", "drifting")
    return table_text([(head, False) for head in heads], rows)


def attention_lines(assessments: "Sequence[Assessment]") -> list[str]:
    """Write what needs a person, one line each; none where all is well."""
    return [
        _one_line(f"{one.scanner_name}: {one.standing}: {reason}")
        for one in assessments
        if one.standing != "within limits"
        for reason in one.reasons
    ] + [
        _one_line(f"{one.scanner_name}: {cause.sentence}")
        for one in assessments
        if one.standing in {"out of limits", "drifting"}
        for cause in one.causes[:1]
    ]


def taken_line(scanner_name: str, outcome: Outcome, verdicts: Sequence[Verdict | None]) -> str:
    """Write one line on an acquisition that was taken in."""
    when = outcome.acquisition.first.acquired_at
    day = "date unknown" if when is None else when.date().isoformat()
    words = [f"{scanner_name}, {day}, {outcome.phantom}: {len(outcome.measurements)} figures"]
    out = [
        measurement.quantity
        for measurement, verdict in zip(outcome.measurements, verdicts, strict=True)
        if verdict is not None and verdict.conformity in {"fail", "conditional fail"}
    ]
    if out:
        words.append(f"out of limits: {', '.join(out)}")
    if not outcome.measurements and outcome.remarks:
        words.append(outcome.remarks[0])
    return _one_line("; ".join(words))


def refused_line(refused: Refused) -> str:
    """Write one line on a file that was refused."""
    return _one_line(f"refused {refused.path}: {refused.reason}")
