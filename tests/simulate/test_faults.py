import math

import numpy as np
import pytest

from qa.errors import SettingError
from qa.simulate import FAULTS, Scan, true_values, with_fault, with_protocol
from qa.simulate.faults import dying_channel


@pytest.mark.parametrize("name", FAULTS)
def test_no_severity_is_health(make, name):
    setup = make("sectioned-190", channels=4)
    healthy, other = setup, with_fault(setup, name, 0.0)
    a, b = Scan(healthy).magnitude(6, noise=False), Scan(other).magnitude(6, noise=False)
    np.testing.assert_allclose(a, b, rtol=1e-12)
    assert other.snr == healthy.snr


def test_a_dying_channel_costs_snr_and_uniformity(make):
    setup = make(channels=4, shading_percent=5.0)
    truths = [true_values(with_fault(setup, "dying channel", s)) for s in (0.0, 0.5, 1.0)]
    snr, piu = ([t[name].value for t in truths] for name in ("snr", "uniformity_piu"))
    assert snr[0] > snr[1] > snr[2]
    assert snr[2] / snr[0] == pytest.approx(math.sqrt(0.75), rel=0.04)
    assert piu[0] > piu[1] > piu[2]
    assert piu[2] < 85


def test_a_ghosting_amplifier_ghosts(make):
    setup = make()
    truths = [true_values(with_fault(setup, "ghosting gradient amplifier", s))["ghosting"] for s in (0.0, 0.4, 1.0)]
    ghosts = [truth.details["ghost_percent"] for truth in truths]
    assert ghosts == pytest.approx([0.0, 2.0, 5.0], abs=0.1)
    assert truths[0].value < 0.1
    # on magnitudes noise and ringing in the other two margins take some of it away
    assert 1.0 < truths[1].value < 2.0
    assert 4.0 < truths[2].value < 5.0


def test_a_gradient_out_of_calibration_stretches_one_axis(make):
    truth = true_values(with_fault(make(), "gradient out of calibration", 0.5))
    assert truth["scale_x"].value == pytest.approx(1.5, abs=1e-6)
    assert truth["scale_y"].value == pytest.approx(0, abs=1e-6)


def test_a_drifting_magnet_loses_frequency(make):
    setup = make()
    before, after = (true_values(s)["centre_frequency"].value for s in (setup, with_fault(setup, "drifting magnet", 1.0)))
    assert (after / before - 1) * 1e6 == pytest.approx(-5.0)


def test_a_crooked_phantom_is_off_centre_and_tilted(make):
    truth = true_values(with_fault(make("sectioned-190"), "phantom put in crooked", 1.0))
    assert truth["setup_tilt"].value == pytest.approx(5.0, abs=0.01)
    assert truth["setup_offset"].value == pytest.approx(math.hypot(12, 6))


def test_a_changed_protocol_changes_header_signal_and_snr(make):
    setup = make()
    changed = with_fault(setup, "protocol somebody changed", 1.0)
    assert changed.echo_ms == 40.0
    assert changed.thickness_mm == 3.0
    expected = 3 / 5 * changed.relative_signal / setup.relative_signal
    assert changed.snr / setup.snr == pytest.approx(expected)
    assert expected == pytest.approx(0.6 * math.exp(-20 / 250), rel=0.02)


def test_snr_goes_with_averages_bandwidth_and_voxel(make):
    setup = make()
    assert with_protocol(setup, averages=4).snr == pytest.approx(2 * setup.snr)
    assert with_protocol(setup, bandwidth_hz_per_pixel=300.0).snr == pytest.approx(setup.snr / math.sqrt(2))
    assert with_protocol(setup, pixel_mm=(1.2, 1.0)).snr == pytest.approx(1.2 * setup.snr)


def test_faults_that_cannot_be_are_refused(make):
    with pytest.raises(SettingError, match="no fault 'gremlins': known are dying channel"):
        with_fault(make(), "gremlins", 0.5)
    with pytest.raises(SettingError, match=r"severity is 1\.5: it must lie from 0 to 1"):
        with_fault(make(), "drifting magnet", 1.5)
    two = make(channels=2)
    with pytest.raises(SettingError, match="channel is 4: this scan has 2"):
        dying_channel(two, 0.5, channel=4)
