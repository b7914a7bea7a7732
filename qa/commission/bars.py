"""The accuracy that is promised, as one table, and the quantities that are tallied without a bar."""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

from qa.quantities import QUANTITIES, quantity
from qa.simulate import Setup, Truth

__all__ = ["BAR_CASES", "COVERAGE", "COVERAGE_CASES", "NORMAL_95", "ROD_CENTRES", "Row", "row_of", "rows"]

Scale = Literal["absolute", "pixels", "percent"]

COVERAGE = (0.93, 0.98)
"""Share of the intervals of k = 2 that may hold the truth, over at least `COVERAGE_CASES` cases."""
COVERAGE_CASES = 500
BAR_CASES = 200
"""Cases over which bias and 95 % point are promised; fewer miss a bar only where chance cannot be the reason."""
ROD_CENTRES = "rod_centres"
NORMAL_95 = 1.959964

_LENGTHS = ("length_0", "length_45", "length_90", "length_135")


@dataclass(frozen=True)
class Row:
    """One line of the table: a quantity over a part of the range, and what is promised of it there.

    Attributes
    ----------
    quantity : str
        Name; `rod_centres` stands for the places that `lattice_rms` gives in its details.
    part : str
        The part of the range in words; empty for all of it.
    scale : str
        What bias and 95 % point are stated in: the quantity's own unit, pixels of the case, or percent of the true value.
    bias, within : float or None
        Most that the bias may be, and the error that 95 % of the cases stay within.
    limits : float or None
        That many times the least standard deviation that noise allows is allowed too, where it is more.
    limit_words : str
        The same in words.
    snr, true : tuple of float
        Cases that belong here, by signal-to-noise ratio and by true value.
    inside_block, bent : bool or None
        Whether both bars of the thickness insert lie inside their block; whether the gradients are not linear; None for
        either.
    detail : str
        Which detail of the truth is the true value, where the method states another value than the truth does.
    judged : bool
        False where no coverage can be asked for, for the reason in `remark`.
    remark : str
        What a reader should know of the row.
    """

    quantity: str
    part: str = ""
    scale: Scale = "absolute"
    bias: float | None = None
    within: float | None = None
    limits: float | None = None
    limit_words: str = ""
    snr: tuple[float, float] = (0.0, math.inf)
    true: tuple[float, float] = (-math.inf, math.inf)
    inside_block: bool | None = None
    bent: bool | None = None
    detail: str = ""
    judged: bool = True
    remark: str = ""

    @property
    def key(self) -> str:
        """Name of the row."""
        return f"{self.quantity}, {self.part}" if self.part else self.quantity

    @property
    def title(self) -> str:
        """What a report calls the quantity."""
        return "Rod centres" if self.quantity == ROD_CENTRES else quantity(self.quantity).title

    @property
    def unit(self) -> str:
        """Unit of bias and 95 % point."""
        match self.scale:
            case "pixels":
                return "pixel"
            case "percent":
                return "%"
            case "absolute":
                return quantity(self.quantity).unit

    def allowed(self, limit: float | None) -> float | None:
        """Return what the bar allows one case, given the least standard deviation there."""
        if self.within is None and self.limits is None:
            return None
        return max(self.within or 0.0, (self.limits or 0.0) * (limit or 0.0))


_BENT = "where gradients are bent the centre of the outline is not where the phantom's centre appears, slice by slice"
_SAMPLING = "4 times the sampling limit 1 / sqrt(2 n)"
_TABLE: tuple[Row, ...] = (
    *(Row(name, scale="percent", bias=1.0, limits=4.0, limit_words=_SAMPLING) for name in ("snr", "snr_background")),
    # The method states the uniformity of the image without noise; the truth's own value is that of expected magnitudes.
    Row("uniformity_piu", "SNR 200 and above", snr=(200, math.inf), bias=0.3, within=1.0, detail="noise_free"),
    Row("uniformity_piu", "SNR 100 to 200", snr=(100, 200), bias=0.5, within=1.0, detail="noise_free"),
    Row("uniformity_piu", "SNR below 100", snr=(0, 100), detail="noise_free"),
    Row("ghosting", bias=0.1, within=0.3, limits=2.0, limit_words="twice the sampling limit of the four means"),
    *(Row(name, scale="pixels", bias=0.05, within=0.15) for name in _LENGTHS),
    Row(ROD_CENTRES, scale="pixels", bias=0.02, within=0.10),
    Row(
        "slice_thickness",
        "bars inside the block",
        bias=0.05,
        within=0.15,
        limits=1.3 * NORMAL_95,
        limit_words="1.3 times the Cram\u00e9r-Rao limit",
        inside_block=True,
    ),
    Row("slice_thickness", "a bar runs out of the block", inside_block=False),
    *(
        row
        for name in ("slice_position", "slice_position_end")
        for row in (
            Row(name, "\u22125 to +5 mm", bias=0.05, within=0.20, true=(-5.0, 5.0)),
            Row(name, "beyond +5 mm", true=(5.0, math.inf)),
            Row(name, "beyond \u22125 mm", true=(-math.inf, -5.0)),
        )
    ),
    Row("centre_frequency", judged=False, remark="read from the header, not estimated: its interval always holds the truth"),
    Row("setup_offset", "gradients linear", bent=False),
    Row("setup_offset", "gradients bent", bent=True, judged=False, remark=_BENT),
    Row("setup_tilt", "gradients linear", bent=False),
    Row("setup_tilt", "gradients bent", bent=True, judged=False, remark=_BENT),
)
_BY_QUANTITY: dict[str, tuple[Row, ...]] = {
    row.quantity: tuple(other for other in _TABLE if other.quantity == row.quantity) for row in _TABLE
}


def rows() -> Iterator[Row]:
    """Yield all rows in the order of the table of quantities, those without a bar too."""
    for name in QUANTITIES:
        yield from _BY_QUANTITY.get(name, (Row(name),))
        if name == "lattice_max":
            yield from _BY_QUANTITY[ROD_CENTRES]


def row_of(name: str, setup: Setup, truth: Truth) -> Row:
    """Return the row that one figure of one scan belongs to."""
    inside = truth.details.get("inside_block")
    for row in _BY_QUANTITY.get(name, ()):
        if (
            row.snr[0] <= setup.snr < row.snr[1]
            and row.true[0] <= truth.value <= row.true[1]
            and row.inside_block in {None, inside}
            and row.bent in {None, setup.bent}
        ):
            return row
    return Row(name)
