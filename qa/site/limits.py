"""Tolerance limits: what `[[limit]]` in site.toml may say, and the published defaults that travel with the program."""

import hashlib
import json
import tomllib
from collections.abc import Iterable
from dataclasses import asdict, fields
from difflib import get_close_matches
from functools import cache
from importlib.resources import files
from itertools import product
from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from qa.quantities import QUANTITIES
from qa.records import DecisionRule, Limit

__all__ = ["LimitTable", "did_you_mean", "limits_json", "limits_sha256", "parse_limits", "shipped_limits"]

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Positive = Annotated[float, Field(strict=True, allow_inf_nan=False, gt=0)]
Text = Annotated[str, Field(strict=True, min_length=1)]


def did_you_mean(word: str, allowed: Iterable[str]) -> str:
    """Say which of the allowed words was perhaps meant, and which there are: the end of a sentence."""
    words = list(allowed)
    near = get_close_matches(word.casefold(), [w.casefold() for w in words], n=1, cutoff=0.6)
    meant = next((w for w in words if near and w.casefold() == near[0]), None)
    hint = f"did you mean {meant!r}? " if meant else ""
    return f"{hint}Allowed: {', '.join(words)}"


def _quantity(name: str) -> str:
    if name not in QUANTITIES:
        raise ValueError(f"unknown quantity {name!r}: {did_you_mean(name, QUANTITIES)}")
    return name


def _many(value: Any) -> Any:  # noqa: ANN401 - what TOML holds
    return [value] if isinstance(value, str) else value


def _pattern(text: str) -> str:
    """Check a shell pattern: every bracket that opens is closed."""
    rest = text
    while (start := rest.find("[")) >= 0:
        end = rest.find("]", start + (3 if rest[start + 1 : start + 2] == "!" else 2))
        if end < 0:
            raise ValueError(f"the shell pattern {text!r} opens a bracket that is not closed: write [[] for a bracket itself")
        rest = rest[end + 1 :]
    return text


Pattern = Annotated[str, Field(strict=True, min_length=1), AfterValidator(_pattern)]
Patterns = Annotated[tuple[Pattern, ...], BeforeValidator(_many), Field(min_length=1)]
Quantities = Annotated[
    tuple[Annotated[str, Field(strict=True), AfterValidator(_quantity)], ...], BeforeValidator(_many), Field(min_length=1)
]

ANY = ("*",)
_SELECTORS = ("quantity", "scanner", "phantom", "coil", "protocol")
_BOUNDS = ("lower", "upper", "plus_minus", "lower_percent_of_baseline", "upper_percent_of_baseline", "per_day")


class LimitTable(BaseModel):
    """One `[[limit]]` of site.toml: the keys of `qa.records.Limit`, of which the patterns may be lists.

    `off = true` takes the place of bounds where no limit, not even a shipped one, is to apply; it becomes a limit without
    bounds.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    quantity: Quantities
    scanner: Patterns = ANY
    phantom: Patterns = ANY
    coil: Patterns = ANY
    protocol: Patterns = ANY
    field_strength_T: Positive | None = None
    field_strength_below_T: Positive | None = None
    slice_thickness_mm: Positive | None = None
    lower: Number | None = None
    upper: Number | None = None
    nominal: Number | None = None
    plus_minus: Positive | None = None
    lower_percent_of_baseline: Positive | None = None
    upper_percent_of_baseline: Positive | None = None
    per_day: Positive | None = None
    warn_lower: Number | None = None
    warn_upper: Number | None = None
    warn_plus_minus: Positive | None = None
    warn_percent_of_baseline: Positive | None = None
    warn_per_day: Positive | None = None
    rule: DecisionRule = "simple"
    source: Text = "the department's own"
    off: Annotated[bool, Field(strict=True)] = False

    @model_validator(mode="after")
    def _possible(self) -> "LimitTable":
        bounded = any(getattr(self, key) is not None for key in _BOUNDS)
        if self.off and bounded:
            raise ValueError("off = true leaves no room for bounds")
        if not self.off and not bounded:
            raise ValueError(f"sets no bound: give {', '.join(_BOUNDS)}, or off = true")
        for needed, key in (("plus_minus", "nominal"), ("plus_minus", "warn_plus_minus"), ("per_day", "warn_per_day")):
            if getattr(self, key) is not None and getattr(self, needed) is None:
                raise ValueError(f"{key} needs {needed} beside it")
        if self.field_strength_T is not None and self.field_strength_below_T is not None:
            raise ValueError("field_strength_T and field_strength_below_T exclude each other: give one of them")
        _ordered(self._pairs())
        return self

    def _pairs(self) -> list[tuple[str, float | None, str, float | None]]:
        warn = self.warn_percent_of_baseline
        warn_low, warn_high = (warn, None) if warn is not None and warn <= 100 else (None, warn)
        pairs = [
            ("lower", self.lower, "upper", self.upper),
            ("lower", self.lower, "warn_lower", self.warn_lower),
            ("warn_lower", self.warn_lower, "warn_upper", self.warn_upper),
            ("warn_lower", self.warn_lower, "upper", self.upper),
            ("lower", self.lower, "warn_upper", self.warn_upper),
            ("warn_upper", self.warn_upper, "upper", self.upper),
            (
                "lower_percent_of_baseline",
                self.lower_percent_of_baseline,
                "upper_percent_of_baseline",
                self.upper_percent_of_baseline,
            ),
            ("lower_percent_of_baseline", self.lower_percent_of_baseline, "warn_percent_of_baseline", warn_low),
            ("warn_percent_of_baseline", warn_high, "upper_percent_of_baseline", self.upper_percent_of_baseline),
            ("warn_plus_minus", self.warn_plus_minus, "plus_minus", self.plus_minus),
            ("warn_per_day", self.warn_per_day, "per_day", self.per_day),
        ]
        if self.nominal is not None and self.plus_minus is not None:
            low, high = self.nominal - self.plus_minus, self.nominal + self.plus_minus
            pairs += [
                ("lower", self.lower, "the upper end of nominal", high),
                ("the lower end of nominal", low, "upper", self.upper),
            ]
        return pairs

    def limits(self, *, shipped: bool = False) -> tuple[Limit, ...]:
        """Give one limit for each combination of the listed patterns."""
        rest = {
            key: value for key, value in self.model_dump().items() if key not in {*_SELECTORS, "off"} and value is not None
        }
        combinations = product(*(getattr(self, selector) for selector in _SELECTORS))
        drafts = (Limit(**dict(zip(_SELECTORS, chosen, strict=True)), **rest, shipped=shipped) for chosen in combinations)
        return tuple(Limit(**{**asdict(draft), "key": _key(draft)}) for draft in drafts)


def _ordered(pairs: Iterable[tuple[str, float | None, str, float | None]]) -> None:
    for low, first, high, second in pairs:
        if first is not None and second is not None and first > second:
            raise ValueError(f"{low} {first:g} lies above {high} {second:g}: it must be below")


def _key(limit: Limit) -> str:
    parts = [limit.quantity, *(f"{s} {v}" for s in _SELECTORS[1:] if (v := getattr(limit, s)) != "*")]
    numbers = (
        ("at", limit.field_strength_T, "T"),
        ("below", limit.field_strength_below_T, "T"),
        ("slices of", limit.slice_thickness_mm, "mm"),
    )
    parts += [f"{word} {value:g} {unit}" for word, value, unit in numbers if value is not None]
    return ", ".join(parts) + (" (shipped)" if limit.shipped else "")


@cache
def shipped_limits() -> tuple[Limit, ...]:
    """Give the published default limits, each with source and edition; a department's own come first."""
    text = files("qa.site").joinpath("limits.toml").read_text("utf-8")
    tables = (LimitTable.model_validate(table) for table in tomllib.loads(text)["limit"])
    return tuple(limit for table in tables for limit in table.limits(shipped=True))


def limits_json(limits: Iterable[Limit]) -> str:
    """Write limits as canonical JSON: the text that a version of the limits is kept as and hashed by."""
    rows = [{key: value for key, value in asdict(limit).items() if value is not None} for limit in limits]
    return json.dumps(rows, ensure_ascii=False, sort_keys=True, separators=(",", ":"))


def limits_sha256(limits: Iterable[Limit]) -> str:
    """Content hash of a set of limits."""
    return hashlib.sha256(limits_json(limits).encode("utf-8")).hexdigest()


def parse_limits(text: str) -> tuple[Limit, ...]:
    """Read back what `limits_json` wrote: the limits of an earlier version; a key unknown today is left out."""
    known = {f.name for f in fields(Limit)}
    return tuple(Limit(**{key: value for key, value in row.items() if key in known}) for row in json.loads(text))
