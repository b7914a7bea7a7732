import dataclasses

import pytest

from qa.commission import commission
from qa.commission.cases import locate_and_measure
from qa.phantoms import load_phantom


@pytest.fixture(scope="session")
def sphere():
    return load_phantom("sphere-170")


@pytest.fixture(scope="session")
def run(sphere):
    """Twelve scans of a sphere, on one process."""
    return commission([sphere], 12, jobs=1)


@dataclasses.dataclass(frozen=True)
class Spoiled:
    """The program's own routines with an error put in: a function of name, value and uncertainty gives the pair to report."""

    spoil: object

    def __call__(self, acquisition, phantom):
        measured, missed = locate_and_measure(acquisition, phantom)
        changed = []
        for one in measured:
            value, u = self.spoil(one.quantity, one.value, one.standard_uncertainty)
            changed.append(dataclasses.replace(one, value=value, standard_uncertainty=u))
        return tuple(changed), missed


@pytest.fixture(scope="session")
def spoiled():
    return Spoiled
