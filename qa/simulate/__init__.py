"""Digital phantoms of known truth: an honest model of an MR scanner, in k-space, and the true value of every quantity."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from qa.simulate.acquire import simulate
    from qa.simulate.cases import random_setup
    from qa.simulate.dicom_out import write_dicom
    from qa.simulate.encode import Scan
    from qa.simulate.faults import FAULTS, with_fault, with_protocol
    from qa.simulate.setup import PLANES, Setup, default_setup
    from qa.simulate.truth import Truth, true_values

__all__ = [
    "FAULTS",
    "PLANES",
    "Scan",
    "Setup",
    "Truth",
    "default_setup",
    "random_setup",
    "simulate",
    "true_values",
    "with_fault",
    "with_protocol",
    "write_dicom",
]

_HOME = {
    "FAULTS": "faults",
    "Scan": "encode",
    "with_fault": "faults",
    "with_protocol": "faults",
    "PLANES": "setup",
    "Setup": "setup",
    "Truth": "truth",
    "default_setup": "setup",
    "random_setup": "cases",
    "simulate": "acquire",
    "true_values": "truth",
    "write_dicom": "dicom_out",
}


def __getattr__(name: str) -> Any:  # noqa: ANN401 - any public name
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
