"""What the commands print for a person: figures of one acquisition as a table, one line a scanner, what needs attention."""

import io
import sys
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from qa.quantities import QUANTITIES
from qa.records import Outcome
from qa.report.numbers import COVERAGE_FACTOR, rounded

if TYPE_CHECKING:
    from rich.table import Table

__all__ = ["outcome_text", "table_text"]


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
