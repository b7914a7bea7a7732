"""Tolerance limits: what `[[limit]]` in site.toml may say, and the published defaults that travel with the program."""

import hashlib
import json
import tomllib
from collections.abc import Iterable
from difflib import get_close_matches
from functools import cache
from importlib.resources import files
from typing import Annotated, Any, Literal, TypeGuard

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from qa.quantities import QUANTITIES

__all__ = ["Limit", "did_you_mean", "expand", "limits_json", "limits_sha256", "parse_limits", "shipped_limits"]

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

ANY = ("*",)
_BASELINE_KEYS = (
    "lower_percent_of_baseline",
    "upper_percent_of_baseline",
    "warn_lower_percent_of_baseline",
    "warn_upper_percent_of_baseline",
)


class Limit(BaseModel):
    """One tolerance limit of one quantity.

    Of the limits whose selectors all match a measurement, the department's own come before the shipped ones and the most
    specific before the general (`qa.judge` chooses). After loading, `lower`, `upper`, `warn_lower`, `warn_upper` and the
    four `..._percent_of_baseline` bounds carry everything: `nominal` with `plus_minus` has been turned into bounds, and
    `warn_percent_of_baseline` into the side it belongs to.

    Attributes
    ----------
    quantity : str
        A name from `qa.quantities`.
    scanner, phantom, coil, protocol : tuple of str
        Shell patterns, one of which must match; ("*",) matches anything, an absent value too.
    field_strength_from_T, field_strength_below_T : float or None
        Half-open range of field strengths in tesla.
    slice_thickness_mm : float or None
        The nominal slice thickness it is meant for.
    lower, upper, warn_lower, warn_upper : float or None
        Bounds in the quantity's unit; None where open.
    nominal, plus_minus, warn_plus_minus : float or None
        As written, for showing.
    lower_percent_of_baseline and its like : float or None
        Bounds in per cent of the baseline in force.
    drift_per_day, warn_drift_per_day : float or None
        Largest change per day, either way, in the quantity's unit.
    rule : {"simple", "guarded"}
        Decision rule: the value alone, or the value with its expanded uncertainty, must lie within.
    off : bool
        No limit is applied where this one is the most specific.
    source, edition : str
        Whose limit it is.
    shipped : bool
        Came with the program.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    quantity: Annotated[str, Field(strict=True), AfterValidator(_quantity)]
    scanner: Patterns = ANY
    phantom: Patterns = ANY
    coil: Patterns = ANY
    protocol: Patterns = ANY
    field_strength_from_T: Positive | None = None
    field_strength_below_T: Positive | None = None
    slice_thickness_mm: Positive | None = None
    lower: Number | None = None
    upper: Number | None = None
    warn_lower: Number | None = None
    warn_upper: Number | None = None
    nominal: Number | None = None
    plus_minus: Positive | None = None
    warn_plus_minus: Positive | None = None
    lower_percent_of_baseline: Positive | None = None
    upper_percent_of_baseline: Positive | None = None
    warn_percent_of_baseline: Positive | None = None
    warn_lower_percent_of_baseline: Positive | None = None
    warn_upper_percent_of_baseline: Positive | None = None
    drift_per_day: Positive | None = None
    warn_drift_per_day: Positive | None = None
    rule: Literal["simple", "guarded"] = "simple"
    off: Annotated[bool, Field(strict=True)] = False
    source: Text = "the department's own"
    edition: Annotated[str, Field(strict=True)] = ""
    shipped: Annotated[bool, Field(strict=True)] = False

    @model_validator(mode="before")
    @classmethod
    def _bounds_from_nominal(cls, given: Any) -> Any:  # noqa: ANN401 - what TOML holds
        if not isinstance(given, dict):
            return given
        found = dict(given)
        nominal, plus_minus = found.get("nominal"), found.get("plus_minus")
        if (nominal is None) != (plus_minus is None):
            raise ValueError("nominal and plus_minus go together: give both or neither")
        if "warn_plus_minus" in found and nominal is None:
            raise ValueError("warn_plus_minus needs nominal and plus_minus beside it")
        for within, low, high in (("plus_minus", "lower", "upper"), ("warn_plus_minus", "warn_lower", "warn_upper")):
            span = found.get(within)
            if _is_number(nominal) and _is_number(span):
                bounds = {low: float(nominal - span), high: float(nominal + span)}
                for key, bound in bounds.items():
                    if key in found and found[key] != bound:
                        raise ValueError(f"nominal with {within} leaves no room for {key}: give one or the other")
                found.update(bounds)
        warn = found.get("warn_percent_of_baseline")
        if _is_number(warn):
            side = _warning_side(found)
            if found.setdefault(side, warn) != warn:
                raise ValueError(f"warn_percent_of_baseline and {side} differ: give one of them")
        return found

    @model_validator(mode="after")
    def _possible(self) -> "Limit":
        pairs = (
            ("lower", "upper"),
            ("lower", "warn_lower"),
            ("warn_lower", "warn_upper"),
            ("warn_upper", "upper"),
            ("lower_percent_of_baseline", "upper_percent_of_baseline"),
            ("lower_percent_of_baseline", "warn_lower_percent_of_baseline"),
            ("warn_lower_percent_of_baseline", "warn_upper_percent_of_baseline"),
            ("warn_upper_percent_of_baseline", "upper_percent_of_baseline"),
            ("warn_drift_per_day", "drift_per_day"),
            ("field_strength_from_T", "field_strength_below_T"),
        )
        for low, high in pairs:
            first, second = getattr(self, low), getattr(self, high)
            if first is not None and second is not None and first > second:
                raise ValueError(f"{low} {first:g} lies above {high} {second:g}: it must be below")
        if self.field_strength_from_T is not None and self.field_strength_from_T == self.field_strength_below_T:
            raise ValueError(f"field_strength_from_T and field_strength_below_T are both {self.field_strength_from_T:g}")
        if self.off == self.has_bounds:
            raise ValueError(
                "off = true leaves no room for bounds"
                if self.off
                else "sets no bound: give lower, upper, nominal with plus_minus, "
                "lower_percent_of_baseline, upper_percent_of_baseline, drift_per_day, or off = true"
            )
        return self

    @property
    def has_bounds(self) -> bool:
        """Tell whether there is anything to be held against."""
        keys = ("lower", "upper", "warn_lower", "warn_upper", "drift_per_day", "warn_drift_per_day", *_BASELINE_KEYS)
        return any(getattr(self, key) is not None for key in keys)

    @property
    def needs_baseline(self) -> bool:
        """Tell whether a baseline is needed before it can be applied."""
        return any(getattr(self, key) is not None for key in _BASELINE_KEYS)

    @property
    def selectors(self) -> tuple[Any, ...]:
        """What it is meant for; two limits of one origin with equal selectors contradict each other."""
        return (
            self.quantity,
            *(tuple(sorted(p)) for p in (self.scanner, self.phantom, self.coil, self.protocol)),
            self.field_strength_from_T,
            self.field_strength_below_T,
            self.slice_thickness_mm,
        )

    @property
    def bounds(self) -> tuple[Any, ...]:
        """What it demands."""
        keys = ("lower", "upper", "warn_lower", "warn_upper", *_BASELINE_KEYS, "drift_per_day", "warn_drift_per_day")
        return (*(getattr(self, key) for key in keys), self.rule, self.off)


def _is_number(value: Any) -> TypeGuard[float]:  # noqa: ANN401 - what TOML holds
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _warning_side(found: dict[str, Any]) -> str:
    lower, upper = ("lower_percent_of_baseline" in found), ("upper_percent_of_baseline" in found)
    if lower != upper:
        return "warn_lower_percent_of_baseline" if lower else "warn_upper_percent_of_baseline"
    if lower and upper:
        raise ValueError(
            "warn_percent_of_baseline is meant for one side: "
            "with two bounds give warn_lower_percent_of_baseline and warn_upper_percent_of_baseline"
        )
    return "warn_lower_percent_of_baseline" if found["warn_percent_of_baseline"] <= 100 else "warn_upper_percent_of_baseline"


def expand(table: dict[str, Any]) -> list[dict[str, Any]]:
    """Write a table whose `quantity` lists several out as one table for each."""
    names = table.get("quantity")
    if isinstance(names, list) and names:
        return [{**table, "quantity": name} for name in names]
    return [table]


@cache
def shipped_limits() -> tuple[Limit, ...]:
    """Give the published default limits, each with source and edition; a department's own come first."""
    text = files("qa.site").joinpath("limits.toml").read_text("utf-8")
    tables = [one for table in tomllib.loads(text)["limit"] for one in expand(table)]
    return tuple(Limit.model_validate({**table, "shipped": True}) for table in tables)


def limits_json(limits: tuple[Limit, ...]) -> str:
    """Write limits as canonical JSON: the text that a version of the limits is kept as and hashed by."""
    rows = [limit.model_dump(mode="json", exclude_none=True) for limit in limits]
    return json.dumps(rows, ensure_ascii=False, sort_keys=True, separators=(",", ":"))


def limits_sha256(limits: tuple[Limit, ...]) -> str:
    """Content hash of a set of limits."""
    return hashlib.sha256(limits_json(limits).encode("utf-8")).hexdigest()


def parse_limits(text: str) -> tuple[Limit, ...]:
    """Read back what `limits_json` wrote: the limits of an earlier version."""
    return tuple(Limit.model_validate(row) for row in json.loads(text))
