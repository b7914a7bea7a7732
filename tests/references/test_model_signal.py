"""Signal and frequency of the scanner model against handbook formulas.

Sources: CODATA 2018, proton gyromagnetic ratio over 2 pi 42.577478518 MHz/T (`scipy.constants` carries the edition of its
release; the 2022 value differs by 1.4e-9); Ernst and Anderson 1966 for the spoiled gradient echo in the steady state and
the angle of most signal; the Bloch equations step by step for both sequences.
"""

import math

import numpy as np
import pytest

from qa.phantoms import load_phantom
from qa.simulate import default_setup, simulate
from qa.simulate.signal import ernst_angle_deg, larmor_MHz, spin_echo, spoiled_gradient_echo


def test_the_larmor_relation():
    assert larmor_MHz(1.0) == pytest.approx(42.577478518, rel=1e-8)
    assert larmor_MHz(1.5) == pytest.approx(63.866, abs=5e-4)
    assert larmor_MHz(3.0) == pytest.approx(127.732, abs=5e-4)
    acquisition = simulate(default_setup(load_phantom("sphere-170"), field_strength_T=1.5, repeats=1))
    assert acquisition.settings.frequency_MHz == pytest.approx(63.866, abs=5e-4)


@pytest.mark.parametrize("flip_deg", [5.0, 20.0, 60.0, 90.0])
@pytest.mark.parametrize(("t1_ms", "repetition_ms"), [(300.0, 30.0), (900.0, 10.0), (250.0, 500.0)])
def test_the_spoiled_gradient_echo_reaches_the_steady_state_of_ernst(flip_deg, t1_ms, repetition_ms):
    flip, recovery = math.radians(flip_deg), math.exp(-repetition_ms / t1_ms)
    longitudinal = 1.0
    for _ in range(4000):  # pulse by pulse: what is left along z recovers, what is across is spoiled
        longitudinal = 1 - (1 - longitudinal * math.cos(flip)) * recovery
    expected = longitudinal * math.sin(flip) * math.exp(-4 / 60)
    assert spoiled_gradient_echo(t1_ms, 60.0, repetition_ms, 4.0, flip_deg) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(("t1_ms", "repetition_ms"), [(300.0, 30.0), (900.0, 10.0)])
def test_the_ernst_angle_gives_most_signal(t1_ms, repetition_ms):
    angles = np.arange(0.5, 90, 0.01)
    signals = [spoiled_gradient_echo(t1_ms, 60.0, repetition_ms, 4.0, float(a)) for a in angles]
    assert ernst_angle_deg(t1_ms, repetition_ms) == pytest.approx(angles[int(np.argmax(signals))], abs=0.01)
    # worked: T1 = 900 ms, TR = 10 ms: arccos(exp(-1 / 90)) = 8.53 degrees
    assert ernst_angle_deg(900.0, 10.0) == pytest.approx(8.53, abs=0.01)


@pytest.mark.parametrize("flip_deg", [60.0, 90.0, 110.0])
def test_the_spin_echo_reaches_its_steady_state(flip_deg):
    t1, t2, tr, te = 300.0, 250.0, 500.0, 20.0
    flip, z = math.radians(flip_deg), 1.0
    for _ in range(200):  # excite, recover for TE / 2, invert, recover for the rest
        after = z * math.cos(flip)
        inverted = -(1 - (1 - after) * math.exp(-te / 2 / t1))
        z = 1 - (1 - inverted) * math.exp(-(tr - te / 2) / t1)
    expected = z * math.sin(flip) * math.exp(-te / t2)
    assert spin_echo(t1, t2, tr, te, flip_deg) == pytest.approx(expected, rel=1e-12)
    # the handbook's short form for 90 degrees and TE << TR: (1 - exp(-TR / T1)) exp(-TE / T2)
    short = (1 - math.exp(-tr / t1)) * math.exp(-te / t2)
    assert spin_echo(t1, t2, tr, 0.01, 90.0) * math.exp(-te / t2) == pytest.approx(short, rel=1e-3)


def test_a_scan_s_signal_follows_its_sequence():
    setup = default_setup(load_phantom("sphere-170"), proton_density=0.8)
    assert setup.relative_signal == pytest.approx(0.8 * spin_echo(300.0, 250.0, 500.0, 20.0))
    gradient = setup.but(sequence="GRE", flip_deg=20.0, repetition_ms=30.0, echo_ms=4.0)
    assert gradient.relative_signal == pytest.approx(0.8 * spoiled_gradient_echo(300.0, 250.0, 30.0, 4.0, 20.0))
