"""The one table of what is measured.

JSON, record, limits, charts and reports read name, unit, title and sense from here and from nowhere else.
Definitions and their sources stand in the docstrings of the modules of `qa.measure`.
"""

from dataclasses import dataclass
from enum import Enum

__all__ = ["QUANTITIES", "Quantity", "Sense", "quantity"]


class Sense(Enum):
    """Which way is worse."""

    HIGHER_IS_BETTER = "higher is better"
    LOWER_IS_BETTER = "lower is better"
    NEAR_NOMINAL = "near its nominal value is better"


@dataclass(frozen=True)
class Quantity:
    """One quantity.

    Attributes
    ----------
    name : str
        The name used in JSON, site.toml and the record.
    unit : str
        Unit of the value as written in JSON; "1" for a ratio.
    title : str
        What a report calls it.
    sense : Sense
        Which way is worse.
    decimals : int
        Decimals that a report prints where no uncertainty tells how many.
    setup : bool
        Tells about how the phantom was put in, not about the scanner.
    """

    name: str
    unit: str
    title: str
    sense: Sense
    decimals: int = 2
    setup: bool = False

    @property
    def label(self) -> str:
        """Title with its unit, as an axis or a table head shows it."""
        return self.title if self.unit == "1" else f"{self.title} ({self.unit})"


_HIGH, _LOW, _NEAR = Sense.HIGHER_IS_BETTER, Sense.LOWER_IS_BETTER, Sense.NEAR_NOMINAL

QUANTITIES: dict[str, Quantity] = {
    q.name: q
    for q in (
        Quantity("snr", "1", "Signal-to-noise ratio, two images", _HIGH, 1),
        Quantity("snr_background", "1", "Signal-to-noise ratio, one image", _HIGH, 1),
        Quantity("uniformity_piu", "%", "Percent integral uniformity", _HIGH, 1),
        Quantity("uniformity_naad", "%", "Uniformity, normalised absolute average deviation", _HIGH, 1),
        Quantity("ghosting", "%", "Percent signal ghosting", _LOW, 2),
        Quantity("length_0", "mm", "Diameter at 0 degrees", _NEAR, 2),
        Quantity("length_45", "mm", "Diameter at 45 degrees", _NEAR, 2),
        Quantity("length_90", "mm", "Diameter at 90 degrees", _NEAR, 2),
        Quantity("length_135", "mm", "Diameter at 135 degrees", _NEAR, 2),
        Quantity("length_axial", "mm", "Length end to end", _NEAR, 2),
        Quantity("distortion_max", "%", "Largest geometric distortion", _LOW, 2),
        Quantity("scale_x", "%", "Deviation of scale along rows", _NEAR, 2),
        Quantity("scale_y", "%", "Deviation of scale along columns", _NEAR, 2),
        Quantity("lattice_rms", "mm", "Root-mean-square displacement of the lattice", _LOW, 2),
        Quantity("lattice_max", "mm", "Largest displacement of the lattice", _LOW, 2),
        Quantity("slice_thickness", "mm", "Slice thickness", _NEAR, 2),
        Quantity("slice_position", "mm", "Slice position, first section", _NEAR, 2),
        Quantity("slice_position_end", "mm", "Slice position, last section", _NEAR, 2),
        Quantity("centre_frequency", "MHz", "Centre frequency", _NEAR, 6),
        Quantity("frequency_drift", "ppm", "Drift of the centre frequency from its baseline", _NEAR, 3),
        Quantity("setup_offset", "mm", "Offset of the phantom", _LOW, 1, setup=True),
        Quantity("setup_tilt", "degrees", "Tilt of the phantom", _LOW, 1, setup=True),
    )
}


def quantity(name: str) -> Quantity:
    """Look a quantity up by name.

    Raises
    ------
    KeyError
        There is no such quantity; the message lists those there are.
    """
    try:
        return QUANTITIES[name]
    except KeyError:
        raise KeyError(f"unknown quantity {name!r}: known are {', '.join(QUANTITIES)}") from None
