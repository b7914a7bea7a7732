"""What a commissioning report is made from: each figure of each digital scan beside its true value, and their sums."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any

__all__ = ["CampaignResult", "Case", "CommissionResult", "Figure", "Missing", "Tally"]

_NOTHING: Mapping[str, Any] = MappingProxyType({})


@dataclass(frozen=True)
class Figure:
    """One figure of one case, beside its true value.

    Attributes
    ----------
    quantity : str
        Name of the quantity.
    true, measured, standard_uncertainty : float
        In the quantity's own unit.
    error : float
        Measured less true, in the unit in which the bar is stated: the quantity's own, pixels of the case, or percent of the
        true value.
    unit : str
        That unit.
    allowed : float or None
        What the bar allows in this case, in that unit; None where there is no bar.
    limit : float or None
        The least standard deviation that noise allows any method, in that unit; None where it was not worked out.
    row : str
        Which part of the range the case falls in: the key of its tally.
    """

    quantity: str
    true: float
    measured: float
    standard_uncertainty: float
    error: float
    unit: str
    allowed: float | None
    limit: float | None
    row: str

    @property
    def covered(self) -> bool:
        """Whether the interval of k = 2 holds the true value."""
        return abs(self.measured - self.true) <= 2 * self.standard_uncertainty

    @property
    def score(self) -> float:
        """Error over standard uncertainty."""
        difference = self.measured - self.true
        if self.standard_uncertainty > 0:
            return difference / self.standard_uncertainty
        return math.copysign(math.inf, difference) if difference else 0.0


@dataclass(frozen=True)
class Missing:
    """A quantity that the images show and that was not measured, and why."""

    quantity: str
    reason: str
    row: str = ""


@dataclass(frozen=True)
class Case:
    """One digital scan: the seed that reproduces it, what was drawn, and all that was found.

    `settings` are plain values by name; `rods` holds, for a lattice, rows of i, j and the error along x and y in pixels;
    `unjudged` names what was measured and has no true value in this scan.
    """

    phantom: str
    seed: int
    snr: float
    pixel_mm: float
    settings: Mapping[str, Any]
    figures: tuple[Figure, ...]
    missing: tuple[Missing, ...]
    rods: tuple[tuple[int, int, float, float], ...] = ()
    unjudged: tuple[str, ...] = ()


@dataclass(frozen=True)
class Tally:
    """What all cases say of one quantity over one part of the range.

    Attributes
    ----------
    row, quantity, title, part : str
        Key, name, what a report calls it, and the part of the range ("SNR 200 and above"; empty for all of it).
    unit : str
        Of bias, 95 % point and their bars.
    remark : str
        What a reader should know of this line.
    cases, measured : int
        Cases in which the images show the quantity, and those in which it was measured.
    bias, u_bias : float or None
        Mean error and its standard uncertainty; None where nothing was measured (for the second: fewer than two).
    bias_bar : float or None
        The most that the bias may be.
    point : float or None
        The error, either way, within which 95 % of the cases lie, a case that was not measured lying outside; None where
        more than 5 % were not measured.
    bar_words : str
        The bar of the 95 % point in words; empty where there is none.
    allowed : tuple of float or None
        The least and the most that this bar allows among the cases.
    share : float or None
        Share of the cases within the bar.
    limit : float or None
        Median over the cases of the 95 % point that an error of the least standard deviation noise allows would have.
    coverage : float or None
        Share of the intervals of k = 2 that hold the true value.
    coverage_range : tuple of float or None
        Exact 95 % confidence interval of the coverage (Clopper and Pearson 1934).
    bias_met, point_met, coverage_met : bool or None
        None where there is no bar.
    worst, worst_seed
        The figure furthest out against its bar (or against the others where there is none), and the seed of its case.
    missing : tuple of (str, int, int)
        Reason, how many cases, and the first seed among them.
    """

    row: str
    quantity: str
    title: str
    part: str
    unit: str
    remark: str
    cases: int
    measured: int
    bias: float | None
    u_bias: float | None
    bias_bar: float | None
    point: float | None
    bar_words: str
    allowed: tuple[float, float] | None
    share: float | None
    limit: float | None
    coverage: float | None
    coverage_range: tuple[float, float] | None
    bias_met: bool | None
    point_met: bool | None
    coverage_met: bool | None
    worst: Figure | None
    worst_seed: int | None
    missing: tuple[tuple[str, int, int], ...]

    @property
    def met(self) -> bool | None:
        """Whether every bar that there is was met; None where there is none."""
        judged = [v for v in (self.bias_met, self.point_met, self.coverage_met) if v is not None]
        return all(judged) if judged else None


@dataclass(frozen=True)
class CampaignResult:
    """All cases of one phantom, in order of their seeds, and what they add up to."""

    phantom: str
    phantom_sha256: str
    first_seed: int
    cases: tuple[Case, ...]
    tallies: tuple[Tally, ...]

    @property
    def met(self) -> bool:
        """Whether no bar was missed."""
        return all(tally.met is not False for tally in self.tallies)


@dataclass(frozen=True)
class CommissionResult:
    """The whole run: one campaign a phantom, and what it ran on.

    `machine` holds facts in words by name: versions of what computes, kind of processor; no name of a computer or person.
    """

    software_version: str
    machine: Mapping[str, str] = field(default_factory=lambda: _NOTHING)
    campaigns: tuple[CampaignResult, ...] = ()

    @property
    def met(self) -> bool:
        """Whether no bar was missed."""
        return all(campaign.met for campaign in self.campaigns)
