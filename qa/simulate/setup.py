"""One digital scan, described: the phantom, how it lies, and the scanner with all its imperfections.

Millimetres and axes follow `qa.geometry`. The phantom's nominal frame is that of the image: x along rows, y along columns,
z along the slice normal; for a square axial stack this is DICOM's patient frame. It is then turned about its own axis and
tilted about the image's x and y.
"""

import math
from dataclasses import dataclass, fields, replace
from datetime import datetime, timedelta
from functools import cached_property
from typing import Any, Literal

import numpy as np

from qa.errors import SettingError
from qa.geometry import Floats, Plane
from qa.phantoms import Phantom
from qa.simulate.checks import check
from qa.simulate.profile import Profile
from qa.simulate.signal import larmor_MHz, spin_echo, spoiled_gradient_echo

__all__ = ["PLANES", "Setup", "default_setup"]

Vector = tuple[float, float, float]
PLANES: dict[str, tuple[Vector, Vector]] = {
    "axial": ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0)),
    "coronal": ((1.0, 0.0, 0.0), (0.0, 0.0, -1.0)),
    "sagittal": ((0.0, 1.0, 0.0), (0.0, 0.0, -1.0)),
}
"""Row and column directions of the three cardinal planes as they are commonly displayed."""


@dataclass(frozen=True, kw_only=True)
class Setup:
    """One acquisition of a digital phantom; every field has a value that a healthy scanner might show.

    Attributes
    ----------
    phantom : Phantom
        What is scanned; the only source of geometry.
    diameter_mm : float or None
        Diameter of a sphere whose definition leaves it open.
    matrix, pixel_mm : tuple
        Rows and columns; row spacing and column spacing, mm.
    slices, thickness_mm, spacing_mm, stack_centre_patient
        Number of slices, full width at half maximum of the profile, distance between slice centres (None: the thickness),
        and the place of the middle of the stack, patient mm.
    row_direction, column_direction : tuple of float
        Image axes in patient coordinates.
    profile_edge_mm : float
        Softness of the slice profile: standard deviation of the Gaussian that blurs a rectangle; 0 is rectangular.
    centre_patient, rotation_deg, tilt_x_deg, tilt_y_deg
        The phantom's centre, its turn about its own axis (x towards y), and its tilt about the image's x and y. At a tilt of
        90 degrees the slices cut it lengthwise; the body is then exact, the inserts' edges across the slice are not.
    air_bubble_mm, filling_port_mm, port_direction_deg
        Depth of air under the body's highest point, patient front up; width and depth of a square plug without signal in the
        middle of the body's side, and its direction from the phantom's x towards y. True lengths leave both out.
    snr : float
        Mean noise-free signal over the measurement region of uniform fill, first repeat, channels all in health, over the
        standard deviation of the real part of one channel's noise; infinity for no noise.
    level : float
        Pixel value of that mean signal.
    channels, coil, channel_gains, noise_correlation
        Receive channels, combined as root sum of squares; "loops" round the phantom or "polynomial" maps; one gain a channel
        (1 in health); correlation of the noise of neighbouring channels, falling geometrically with distance round the array,
        or the whole matrix.
    shading_percent, shading_direction_deg, shading_curvature
        100 (max - min) / max of the combined sensitivity over the cross-section of a phantom that lies centred; where the
        bright side is; share of the shading that is curved rather than linear: brighter outside, or inside where negative.
    ghost_percent, ghost_shift, ghost_phase_deg
        Ghost amplitude in percent of the object, its shift as a fraction of the field of view along the phase-encode axis
        (0.5: alternating lines; else one ghost to either side), and its phase.
    gain_drift_percent, gain_drift_slope_percent
        Change of gain from one repeat to the next: throughout, and rising linearly along x to this much at 100 mm.
    scale_x_percent, scale_y_percent, nonlinearity_x_mm, nonlinearity_y_mm
        Image scale error about the isocentre; and displacement at 100 mm from it along each axis, growing as the cube.
    off_resonance_hz
        Shifts the image along the readout by this over `bandwidth_hz_per_pixel`.
    partial_fourier, acquired_fraction, apodisation
        Share of phase-encode lines acquired, the rest zero; share of k-space acquired along both axes, zero filled to the
        matrix; "none" or "hann".
    sequence, repetition_ms, echo_ms, flip_deg, t1_ms, t2_ms, proton_density
        Spin echo ("SE") or spoiled gradient echo ("GRE", `t2_ms` is then T2*), and the fill.
    """

    phantom: Phantom
    diameter_mm: float | None = None
    matrix: tuple[int, int] = (256, 256)
    pixel_mm: tuple[float, float] = (1.0, 1.0)
    slices: int = 1
    thickness_mm: float = 5.0
    spacing_mm: float | None = None
    stack_centre_patient: Vector = (0.0, 0.0, 0.0)
    row_direction: Vector = (1.0, 0.0, 0.0)
    column_direction: Vector = (0.0, 1.0, 0.0)
    profile_edge_mm: float = 0.0
    centre_patient: Vector = (0.0, 0.0, 0.0)
    rotation_deg: float = 0.0
    tilt_x_deg: float = 0.0
    tilt_y_deg: float = 0.0
    air_bubble_mm: float = 0.0
    filling_port_mm: tuple[float, float] = (0.0, 0.0)
    port_direction_deg: float = -90.0
    snr: float = 150.0
    level: float = 8000.0
    channels: int = 1
    coil: Literal["loops", "polynomial"] = "loops"
    channel_gains: tuple[float, ...] | None = None
    noise_correlation: float | tuple[tuple[float, ...], ...] = 0.0
    shading_percent: float = 5.0
    shading_direction_deg: float = 30.0
    shading_curvature: float = 0.5
    ghost_percent: float = 0.0
    ghost_shift: float = 0.5
    ghost_phase_deg: float = 0.0
    gain_drift_percent: float = 0.0
    gain_drift_slope_percent: float = 0.0
    scale_x_percent: float = 0.0
    scale_y_percent: float = 0.0
    nonlinearity_x_mm: float = 0.0
    nonlinearity_y_mm: float = 0.0
    off_resonance_hz: float = 0.0
    partial_fourier: float = 1.0
    acquired_fraction: float = 1.0
    apodisation: Literal["none", "hann"] = "none"
    phase_encode: Literal["row", "column"] = "column"
    repeats: int = 2
    sequence: Literal["SE", "GRE"] = "SE"
    repetition_ms: float = 500.0
    echo_ms: float = 20.0
    flip_deg: float = 90.0
    averages: int = 1
    bandwidth_hz_per_pixel: float = 150.0
    t1_ms: float = 300.0
    t2_ms: float = 250.0
    proton_density: float = 1.0
    field_strength_T: float = 3.0
    frequency_offset_ppm: float = 0.0
    seed: int = 0
    manufacturer: str = "Invented"
    model: str = "Model 7"
    station: str = "NORTH3T"
    serial: str = "40071"
    software: str = "1"
    institution: str = "Saltmarsh Imaging"
    receive_coil: str = "HEAD"
    protocol: str = "QA_SE"
    series_description: str = ""
    study_description: str = "QA weekly"
    patient_id: str = ""
    acquired_at: datetime = datetime(2026, 11, 23, 7, 42, 10)  # noqa: DTZ001 - the scanner's own clock has no time zone
    repeat_seconds: float = 130.0

    def __post_init__(self) -> None:
        """Refuse what cannot be."""
        check(self)

    @property
    def frequency_MHz(self) -> float:  # noqa: N802 - a unit keeps its case
        """Centre frequency by the Larmor relation, with the magnet's own offset."""
        return larmor_MHz(self.field_strength_T) * (1 + 1e-6 * self.frequency_offset_ppm)

    @property
    def relative_signal(self) -> float:
        """Signal of the fill under this protocol, in units of its equilibrium magnetisation at proton density 1."""
        formula = spin_echo if self.sequence == "SE" else spoiled_gradient_echo
        each = formula(self.t1_ms, self.t2_ms, self.repetition_ms, self.echo_ms, self.flip_deg)
        return self.proton_density * each

    @property
    def body_diameter_mm(self) -> float:
        """Diameter of what lies in the scanner."""
        diameter = self.phantom.body.diameter_mm if self.diameter_mm is None else self.diameter_mm
        assert diameter is not None  # noqa: S101 - checked on construction
        return diameter

    @property
    def description(self) -> str:
        """Series description."""
        return self.series_description or f"QA {self.phantom.name}"

    @cached_property
    def axes(self) -> Floats:
        """Row direction, column direction and slice normal as the columns of a (3, 3) matrix."""
        row, column = np.asarray(self.row_direction), np.asarray(self.column_direction)
        return np.stack([row, column, np.cross(row, column)], axis=1)

    @cached_property
    def planes(self) -> tuple[Plane, ...]:
        """The slices' planes, in order along the normal."""
        (rows, columns), (dy, dx) = self.matrix, self.pixel_mm
        spacing = self.thickness_mm if self.spacing_mm is None else self.spacing_mm
        corner = np.asarray(self.stack_centre_patient) - self.axes @ ((columns - 1) / 2 * dx, (rows - 1) / 2 * dy, 0.0)
        heights = (np.arange(self.slices) - (self.slices - 1) / 2) * spacing
        return tuple(
            Plane(
                position_patient=_vector(corner + height * self.axes[:, 2]),
                row_direction=self.row_direction,
                column_direction=self.column_direction,
                pixel_mm=self.pixel_mm,
                shape=self.matrix,
            )
            for height in heights
        )

    @cached_property
    def tilt(self) -> Floats:
        """(3, 3) turn that tilts the phantom's axis out of the slice normal, in image axes."""
        a, b = math.radians(self.tilt_x_deg), math.radians(self.tilt_y_deg)
        about_x = np.array([[1, 0, 0], [0, math.cos(a), -math.sin(a)], [0, math.sin(a), math.cos(a)]])
        about_y = np.array([[math.cos(b), 0, math.sin(b)], [0, 1, 0], [-math.sin(b), 0, math.cos(b)]])
        turned: Floats = about_x @ about_y
        return turned

    @cached_property
    def orientation(self) -> Floats:
        """(3, 3): the phantom's x, y and z axes in patient coordinates, as columns."""
        c = math.radians(self.rotation_deg)
        about_z = np.array([[math.cos(c), -math.sin(c), 0], [math.sin(c), math.cos(c), 0], [0, 0, 1]])
        turned: Floats = self.axes @ self.tilt @ about_z
        return turned

    @property
    def axis(self) -> Floats:
        """The phantom's axis in image axes: along rows, along columns, along the slice normal."""
        return np.asarray(self.tilt[:, 2])

    @property
    def lengthwise(self) -> bool:
        """Whether the slices cut a cylinder along its length, as a localiser does."""
        return self.phantom.body.shape == "cylinder" and abs(float(self.axis[2])) < 0.5

    @property
    def profile(self) -> Profile:
        """The slice profile."""
        return Profile(self.thickness_mm, self.profile_edge_mm)

    @property
    def bent(self) -> bool:
        """Whether the gradients are not linear."""
        return bool(self.nonlinearity_x_mm or self.nonlinearity_y_mm)

    @property
    def off_resonance_shift_mm(self) -> tuple[float, float]:
        """Shift of the image along in-plane x and y from off-resonance: along the readout."""
        pixels = self.off_resonance_hz / self.bandwidth_hz_per_pixel
        if self.phase_encode == "column":
            return pixels * self.pixel_mm[1], 0.0
        return 0.0, pixels * self.pixel_mm[0]

    def region_radius_mm(self, body_radius_mm: float, percent: float | None = None) -> float:
        """Radius of the measurement region in a cross-section: by area where the definition says so, else by its share."""
        body = self.phantom.body
        if body.region_area_cm2 is not None:
            return math.sqrt(100 * body.region_area_cm2 / math.pi)
        return math.sqrt((body.region_percent if percent is None else percent) / 100) * body_radius_mm

    def started(self, repeat: int) -> datetime:
        """Time at which a repeat (counted from 0) began."""
        return self.acquired_at + timedelta(seconds=repeat * self.repeat_seconds)

    def but(self, **changes: Any) -> "Setup":  # noqa: ANN401 - any field
        """Return the same scan with some settings changed."""
        unknown = set(changes) - {f.name for f in fields(self)}
        if unknown:
            raise SettingError(f"There is no setting {min(unknown)!r} of a digital scan: see qa.simulate.Setup.")
        return replace(self, **changes)


def default_setup(phantom: Phantom, **changes: Any) -> Setup:  # noqa: ANN401 - any field of Setup
    """Describe a plain scan of a phantom: the slices its definition asks for, and a field of view with margins for ghosting.

    Parameters
    ----------
    phantom : Phantom
        What is scanned.
    **changes
        Any field of `Setup`.

    Returns
    -------
    Setup
        The scan.

    Raises
    ------
    SettingError
        A setting that cannot be.
    """
    settings: dict[str, Any] = {"phantom": phantom}
    if phantom.body.diameter_mm is None:
        settings["diameter_mm"] = 170.0
    if phantom.slices is not None:
        stack = phantom.slices
        middle = stack.first_z_mm + (stack.count - 1) / 2 * stack.spacing_mm
        settings |= {
            "slices": stack.count,
            "thickness_mm": stack.thickness_mm,
            "spacing_mm": stack.spacing_mm,
            "stack_centre_patient": (0.0, 0.0, middle),
        }
    if "matrix" not in changes and "pixel_mm" not in changes:
        diameter = changes.get("diameter_mm") or phantom.body.diameter_mm or 170.0
        settings["matrix"] = (256, 256) if diameter <= 190 else (300, 300)
    return Setup(**(settings | changes))


def _vector(values: Floats) -> Vector:
    return float(values[0]), float(values[1]), float(values[2])
