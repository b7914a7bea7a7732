"""Signal of the fill, and the frequency it gives off."""

import math

__all__ = ["ernst_angle_deg", "larmor_MHz", "spin_echo", "spoiled_gradient_echo"]


def larmor_MHz(field_strength_T: float) -> float:  # noqa: N802 - a unit keeps its case
    """Return the proton's resonance frequency, MHz: gyromagnetic ratio of CODATA, as `scipy.constants` carries it."""
    from scipy.constants import physical_constants

    return float(physical_constants["proton gyromag. ratio in MHz/T"][0]) * field_strength_T


def spin_echo(t1_ms: float, t2_ms: float, repetition_ms: float, echo_ms: float, flip_deg: float = 90.0) -> float:
    """Return the steady-state signal of a spin echo with a refocusing pulse of 180 degrees.

    Per unit of equilibrium magnetisation. The refocusing pulse inverts what has recovered until TE / 2, so that with
    E = exp(-TR / T1) and F = exp(-(TR - TE / 2) / T1) the magnetisation before each excitation is
    (1 - 2 F + E) / (1 + cos(flip) E); for 90 degrees and short TE this is the familiar 1 - E.

    Source: Bernstein, King and Zhou, Handbook of MRI Pulse Sequences, section 14.3 (from memory).
    """
    recovery, late = math.exp(-repetition_ms / t1_ms), math.exp(-(repetition_ms - echo_ms / 2) / t1_ms)
    flip = math.radians(flip_deg)
    before = (1 - 2 * late + recovery) / (1 + math.cos(flip) * recovery)
    return before * math.sin(flip) * math.exp(-echo_ms / t2_ms)


def spoiled_gradient_echo(t1_ms: float, t2_star_ms: float, repetition_ms: float, echo_ms: float, flip_deg: float) -> float:
    """Return the steady-state signal of a spoiled gradient echo, per unit of equilibrium magnetisation.

    The formula that carries the name of Ernst. Source: Ernst and Anderson 1966; Bernstein, King and Zhou, Handbook of MRI
    Pulse Sequences, section 14.1 (from memory).
    """
    recovery, flip = math.exp(-repetition_ms / t1_ms), math.radians(flip_deg)
    steady = math.sin(flip) * (1 - recovery) / (1 - math.cos(flip) * recovery)
    return steady * math.exp(-echo_ms / t2_star_ms)


def ernst_angle_deg(t1_ms: float, repetition_ms: float) -> float:
    """Return the flip angle of most signal of a spoiled gradient echo."""
    return math.degrees(math.acos(math.exp(-repetition_ms / t1_ms)))
