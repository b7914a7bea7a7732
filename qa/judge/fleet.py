"""Scanners of one model against each other."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from qa.judge.baseline import robust_scatter
from qa.judge.records import Assessment, QuantityState
from qa.quantities import QUANTITIES

__all__ = ["FleetRow", "compare_fleet"]

_SESSIONS = 8
_FAR = 3.5
_AT_LEAST = 4


@dataclass(frozen=True)
class FleetRow:
    """One quantity of one scanner beside the other scanners of its model.

    Attributes
    ----------
    model, quantity, phantom, unit : str
        What is compared.
    scanner_name : str
        Whose value.
    value, scatter : float
        Median and scatter of its last sessions, eight at most; the scatter is 0 for a single session.
    others : float
        Median of the other scanners.
    scanners : int
        How many are compared.
    apart : float or None
        Distance from the others' median in their scatter; None with fewer than four scanners, whose scatter says too little.
    stands_out : bool
        More than 3.5 of them away (the customary bound for a robust score, Iglewicz and Hoaglin 1993 (m)).
    """

    model: str
    quantity: str
    phantom: str
    unit: str
    scanner_name: str
    value: float
    scatter: float
    others: float
    scanners: int
    apart: float | None
    stands_out: bool


def compare_fleet(assessments: Iterable[Assessment], models: Mapping[str, str]) -> tuple[FleetRow, ...]:
    """Compare scanners of one model, quantity by quantity, on the same phantom with the same protocol.

    Parameters
    ----------
    assessments : iterable of Assessment
        One for each scanner.
    models : mapping of str to str
        Model and field strength, or whatever makes scanners comparable, by scanner; scanners without one are left out.

    Returns
    -------
    tuple of FleetRow
        In order of model, quantity, phantom and scanner; only where at least two scanners share all three.
    """
    groups: dict[tuple[str, str, str, str], list[tuple[str, QuantityState]]] = {}
    for assessment in assessments:
        model = models.get(assessment.scanner_name, "")
        for state in assessment.quantities if model else ():
            if not state.superseded:
                stream = state.stream
                groups.setdefault((model, stream.quantity, stream.phantom, stream.protocol), []).append(
                    (assessment.scanner_name, state)
                )
    rows = [row for key, group in groups.items() for row in _rows(*key[:3], sorted(group, key=lambda g: g[0]))]
    order = {name: i for i, name in enumerate(QUANTITIES)}
    return tuple(sorted(rows, key=lambda r: (r.model, order.get(r.quantity, len(order)), r.phantom, r.scanner_name)))


def _rows(model: str, quantity: str, phantom: str, group: Sequence[tuple[str, QuantityState]]) -> Iterable[FleetRow]:
    if len({name for name, _ in group}) < 2:
        return
    last = [state.stream.values[state.stream.segment][-_SESSIONS:] for _, state in group]
    medians = np.array([np.median(values) for values in last])
    for i, ((name, state), values) in enumerate(zip(group, last, strict=True)):
        rest = np.delete(medians, i)
        middle = float(np.median(rest))
        # The scatter of all, not of the others: with few scanners the others' alone is too often small by chance.
        spread = robust_scatter(medians)
        apart = (float(medians[i]) - middle) / spread if medians.size >= _AT_LEAST and spread > 0 else None
        yield FleetRow(
            model,
            quantity,
            phantom,
            state.stream.unit,
            name,
            float(medians[i]),
            robust_scatter(values) if values.size > 1 else 0.0,
            middle,
            medians.size,
            apart,
            apart is not None and abs(apart) > _FAR,
        )
