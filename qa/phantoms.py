"""Phantom definitions: `phantoms/*.toml` become checked records, all in mm of the phantom's frame.

The frame: origin at the body's centre, +z along its axis (towards the head when set up for axial scans), +x to the patient's
left, +y to the patient's back. A definition carries everything that the routines and the digital phantoms need, so that a
department's own phantom is one file and no code.
"""

import hashlib
import math
import tomllib
from collections.abc import Iterator
from functools import lru_cache
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from qa.errors import PhantomError
from qa.resources import shipped_folder

__all__ = [
    "About",
    "Body",
    "Lattice",
    "LowContrast",
    "Phantom",
    "Ramps",
    "Rods",
    "Section",
    "SliceStack",
    "Slot",
    "Uniform",
    "WedgeBar",
    "WedgeBars",
    "load_phantom",
    "phantom_names",
]

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Percent = Annotated[float, Field(gt=0, le=95)]


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, strict=False)


class About(_Table):
    """Where the figures come from, and what to check before first use."""

    title: str = Field(min_length=1)
    source: str = Field(min_length=1)
    cautions: str = Field(min_length=1)


class Body(_Table):
    """The filled body; a sphere's diameter may be unstated."""

    shape: Literal["sphere", "cylinder"]
    diameter_mm: Positive | None = None
    length_mm: Positive | None = None
    region_percent: Percent = 75.0
    region_area_cm2: Positive | None = None

    @model_validator(mode="after")
    def _complete(self) -> "Body":
        if self.shape == "cylinder" and (self.diameter_mm is None or self.length_mm is None):
            raise ValueError("a cylinder needs diameter_mm and length_mm")
        if self.shape == "sphere" and self.length_mm is not None:
            raise ValueError("a sphere has no length_mm")
        return self


class SliceStack(_Table):
    """The slices that are expected: how many, how thick, how far apart, and the z of the first."""

    count: Annotated[int, Field(ge=1)]
    thickness_mm: Positive
    spacing_mm: Positive
    first_z_mm: Finite


class _Span(_Table):
    z_from_mm: Finite
    z_to_mm: Finite

    @model_validator(mode="after")
    def _ordered(self) -> Any:  # noqa: ANN401 - each subclass returns itself
        if not self.z_from_mm < self.z_to_mm:
            raise ValueError(f"z_from_mm {self.z_from_mm:g} must be below z_to_mm {self.z_to_mm:g}")
        return self


class Uniform(_Span):
    """Nothing but fill between two heights."""

    kind: Literal["uniform"]
    region_percent: Percent | None = None


class LowContrast(_Span):
    """Thin low-contrast discs; their geometry is not described yet, so the section is left alone."""

    kind: Literal["low-contrast"]


class Slot(_Table):
    """One inclined slab of signal in the ramp block.

    `centre_y_mm` and `height_mm` across the slot; the slab is `thickness_mm` thick along z and climbs `slope` mm in z for each
    mm along x, crossing the section's z at x = `crossing_x_mm`.
    """

    centre_y_mm: Finite
    height_mm: Positive
    thickness_mm: Positive
    slope: Finite
    crossing_x_mm: Finite = 0.0


class Ramps(_Span):
    """A signal-free block with crossed ramps: two slots of opposite slope."""

    kind: Literal["ramps"]
    z_mm: Finite
    block_centre_mm: tuple[Finite, Finite]
    block_size_mm: tuple[Positive, Positive]
    slots: tuple[Slot, Slot]

    @model_validator(mode="after")
    def _crossed(self) -> "Ramps":
        if self.slots[0].slope * self.slots[1].slope >= 0:
            raise ValueError("slots must have slopes of opposite sign: the mean of both cancels a tilt")
        low = self.block_centre_mm[1] - self.block_size_mm[1] / 2
        high = self.block_centre_mm[1] + self.block_size_mm[1] / 2
        for slot in self.slots:
            if slot.centre_y_mm - slot.height_mm / 2 < low or slot.centre_y_mm + slot.height_mm / 2 > high:
                raise ValueError(f"slots: the slot at y = {slot.centre_y_mm:g} leaves the block")
        return self


class WedgeBar(_Table):
    """One signal-free bar with a 45 degree face: its length is `length_mm + slope * s` at height s above the section's z."""

    x_from_mm: Finite
    x_to_mm: Finite
    slope: Finite

    @model_validator(mode="after")
    def _ordered(self) -> "WedgeBar":
        if not self.x_from_mm < self.x_to_mm:
            raise ValueError("x_from_mm must be below x_to_mm")
        return self


class WedgeBars(_Table):
    """Two signal-free bars side by side at the body's top edge whose lengths differ with the slice's height.

    Both start at `start_y_mm` and run towards +y for `length_mm` at the section's z; valid within `reach_mm` of it.
    """

    kind: Literal["wedge-bars"]
    z_mm: Finite
    start_y_mm: Finite
    length_mm: Positive
    reach_mm: Positive
    bars: tuple[WedgeBar, WedgeBar]

    @model_validator(mode="after")
    def _opposed(self) -> "WedgeBars":
        if self.bars[0].slope * self.bars[1].slope >= 0:
            raise ValueError("bars must have slopes of opposite sign: their difference gives the position")
        return self

    @property
    def z_from_mm(self) -> float:
        """Lower end of what the bars reach."""
        return self.z_mm - self.reach_mm

    @property
    def z_to_mm(self) -> float:
        """Upper end of what the bars reach."""
        return self.z_mm + self.reach_mm


class Lattice(_Span):
    """A square lattice of signal-free bars, centred on the axis: `bars` each way, `pitch_mm` apart."""

    kind: Literal["lattice"]
    pitch_mm: Positive
    bar_width_mm: Positive
    bars: Annotated[int, Field(ge=2)]
    span_mm: Positive

    def crossings_mm(self) -> list[tuple[int, int, float, float]]:
        """Whole-number indices i, j and x, y in mm of every crossing; for an even count the indices are half-way shifted."""
        half = (self.bars - 1) / 2
        steps = range(self.bars)
        return [
            (i - self.bars // 2, j - self.bars // 2, (i - half) * self.pitch_mm, (j - half) * self.pitch_mm)
            for i in steps
            for j in steps
        ]


class Rods(_Span):
    """Signal-free rods parallel to z on a square lattice, at (pitch i, pitch j) within `reach_mm` of the axis."""

    kind: Literal["rods"]
    pitch_mm: Positive
    rod_diameter_mm: Positive
    reach_mm: Positive

    @model_validator(mode="after")
    def _apart(self) -> "Rods":
        if self.rod_diameter_mm >= self.pitch_mm:
            raise ValueError("rod_diameter_mm must be below pitch_mm")
        return self

    def rods_mm(self) -> list[tuple[int, int, float, float]]:
        """Whole-number indices i, j and x, y in mm of every rod."""
        most = math.floor(self.reach_mm / self.pitch_mm)
        span = range(-most, most + 1)
        return [
            (i, j, i * self.pitch_mm, j * self.pitch_mm)
            for i in span
            for j in span
            if self.pitch_mm * math.hypot(i, j) <= self.reach_mm
        ]


Section = Annotated[Uniform | LowContrast | Ramps | WedgeBars | Lattice | Rods, Field(discriminator="kind")]


class _Definition(_Table):
    about: About
    body: Body
    slices: SliceStack | None = None
    section: tuple[Section, ...] = ()

    @model_validator(mode="after")
    def _inside(self) -> "_Definition":
        length = self.body.length_mm or self.body.diameter_mm
        radius = None if self.body.diameter_mm is None else self.body.diameter_mm / 2
        for number, section in enumerate(self.section, start=1):
            if length is not None:
                low, high = section.z_from_mm, section.z_to_mm
                if isinstance(section, WedgeBars):
                    low = high = section.z_mm
                if low < -length / 2 - 1e-9 or high > length / 2 + 1e-9:
                    raise ValueError(
                        f"section {number} ({section.kind}): z from {low:g} to {high:g} mm lies outside the body, "
                        f"which ends at {-length / 2:g} and {length / 2:g} mm"
                    )
            if radius is not None and (reach := _reach(section)) > radius + 1e-9:
                raise ValueError(
                    f"section {number} ({section.kind}): reaches {reach:g} mm from the axis, "
                    f"outside the body of radius {radius:g} mm"
                )
        return self


def _reach(section: Any) -> float:  # noqa: ANN401 - any section
    match section:
        case Ramps():
            x, y = section.block_centre_mm
            return math.hypot(abs(x) + section.block_size_mm[0] / 2, abs(y) + section.block_size_mm[1] / 2)
        case WedgeBars():
            return abs(section.start_y_mm)
        case Lattice():
            return math.hypot(section.span_mm / 2, section.span_mm / 2)
        case Rods():
            most = max(math.hypot(x, y) for _, _, x, y in section.rods_mm())
            return most + section.rod_diameter_mm / 2
        case _:
            return 0.0


class Phantom(_Table):
    """One phantom: its name (the file's), its definition, and the SHA-256 of the file it came from."""

    name: str
    about: About
    body: Body
    slices: SliceStack | None = None
    sections: tuple[Section, ...] = ()
    sha256: str = ""

    @property
    def radius_mm(self) -> float | None:
        """Radius of the body, None where the definition leaves it open."""
        return None if self.body.diameter_mm is None else self.body.diameter_mm / 2

    @property
    def extent_mm(self) -> float | None:
        """Length along z of the body."""
        return self.body.length_mm if self.body.shape == "cylinder" else self.body.diameter_mm

    @property
    def clear_rim_mm(self) -> float:
        """Width of fill between the body's edge and the rods nearest to it; infinite where there are none."""
        reaches = [_reach(section) for section in self.sections if isinstance(section, Rods)]
        return math.inf if self.radius_mm is None or not reaches else self.radius_mm - max(reaches)

    def sections_at(self, z_from_mm: float, z_to_mm: float) -> Iterator[Any]:
        """Yield the sections that a slice from one height to another meets."""
        return (s for s in self.sections if s.z_from_mm < z_to_mm and s.z_to_mm > z_from_mm)

    def is_uniform(self, z_from_mm: float, z_to_mm: float) -> bool:
        """Tell whether a slice shows nothing but fill: no insert touches it, or a uniform section holds all of it."""
        return all(isinstance(s, Uniform) for s in self.sections_at(z_from_mm, z_to_mm))


def phantom_names() -> tuple[str, ...]:
    """Names of the shipped phantoms, sorted."""
    return tuple(sorted(path.stem for path in shipped_folder("phantoms").glob("*.toml")))


def load_phantom(name: str | Path) -> Phantom:
    """Read and check a definition.

    Parameters
    ----------
    name : str or pathlib.Path
        The name of a shipped phantom, or the path of a department's own `.toml` file.

    Returns
    -------
    Phantom
        The checked definition.

    Raises
    ------
    PhantomError
        Unknown name, unreadable file, or a definition that is wrong; the sentence names file, table and key.
    """
    path = Path(name)
    if path.suffix != ".toml":
        path = shipped_folder("phantoms") / f"{name}.toml"
        if not path.is_file():
            raise PhantomError(
                f"There is no phantom {str(name)!r}: shipped are {', '.join(phantom_names())}; "
                "a phantom of your own is given by the path of its .toml file."
            )
    try:
        content = path.read_bytes()
    except OSError as error:
        raise PhantomError(f"{path}: cannot be read ({error.strerror}): check the path.") from error
    return _parse(path, content)


@lru_cache(maxsize=64)
def _parse(path: Path, content: bytes) -> Phantom:
    try:
        definition = _Definition.model_validate(tomllib.loads(content.decode("utf-8")))
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise PhantomError(f"{path}: is not valid TOML ({error}).") from error
    except ValidationError as error:
        first = error.errors()[0]
        where = ".".join(str(part) for part in first["loc"]) or "the definition"
        said = first["msg"].removeprefix("Value error, ")
        found = "" if isinstance(first["input"], dict) else f", found {first['input']!r}"
        raise PhantomError(f"{path}: {where}: {said}{found}.") from error
    return Phantom(
        name=path.stem,
        about=definition.about,
        body=definition.body,
        slices=definition.slices,
        sections=definition.section,
        sha256=hashlib.sha256(content).hexdigest(),
    )
