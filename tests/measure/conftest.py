"""Digital scans, located and measured."""

from dataclasses import dataclass, replace

import numpy as np
import pytest

from qa.locate import locate
from qa.measure import measure
from qa.phantoms import Phantom, load_phantom
from qa.records import Acquisition, Measurement, NotLocated, NotMeasured, Pose
from qa.simulate import default_setup, simulate


@dataclass(frozen=True)
class Measured:
    phantom: Phantom
    acquisition: Acquisition
    pose: Pose | NotLocated
    found: dict[str, Measurement]
    missed: dict[str, NotMeasured]

    def value(self, name):
        return self.found[name].value

    def reason(self, name):
        return self.missed[name].reason


def measured(acquisition, phantom="sphere-170"):
    """Locate and measure."""
    definition = load_phantom(phantom)
    pose = locate(acquisition, definition)
    found, missed = measure(acquisition, pose, definition)
    return Measured(definition, acquisition, pose, {m.quantity: m for m in found}, {m.quantity: m for m in missed})


def changed(acquisition, *, pixels=None, settings=None, kind=None, repeats=None):
    """Return the acquisition with other pixels (a function of a stack), settings (a dict), kind or number of repeats."""
    series = acquisition.repeats[:repeats]
    if pixels is not None:
        series = tuple(replace(s, pixels=np.asarray(pixels(s.pixels.copy()), dtype=np.float32)) for s in series)
    if settings is not None:
        series = tuple(replace(s, settings=replace(s.settings, **settings)) for s in series)
    if kind is not None:
        series = tuple(replace(s, kind=kind) for s in series)
    return replace(acquisition, repeats=series)


@pytest.fixture(scope="session")
def scan():
    """Make a digital scan; the same request gives the same record."""
    made = {}

    def make(phantom="sphere-170", **changes):
        key = (phantom, *sorted(changes.items()))
        if key not in made:
            made[key] = simulate(default_setup(load_phantom(phantom), **changes))
        return made[key]

    return make


@pytest.fixture(scope="session")
def work():
    return measured


@pytest.fixture(scope="session")
def altered():
    return changed
