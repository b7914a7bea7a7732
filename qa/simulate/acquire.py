"""A described scan becomes the record that reading its DICOM files would give."""

import hashlib
from dataclasses import fields

from qa.records import Acquisition, Scanner, Series, Settings
from qa.simulate.encode import Scan
from qa.simulate.setup import Setup

__all__ = ["simulate", "uid"]


def uid(setup: Setup, *what: object) -> str:
    """Return a unique identifier that depends on the scan's settings and seed alone, under the 2.25 root (PS3.5, B.2).

    Parameters
    ----------
    setup : Setup
        The scan: another one, different in any setting, has other identifiers.
    *what
        What is identified.

    Returns
    -------
    str
        At most 44 characters.
    """
    settings = [(f.name, getattr(setup, f.name)) for f in fields(setup) if f.name != "phantom"]
    said = repr((setup.phantom.name, setup.phantom.sha256, settings, what))
    return f"2.25.{int.from_bytes(hashlib.sha256(said.encode()).digest()[:16], 'big')}"


def simulate(setup: Setup, machine: Scan | None = None) -> Acquisition:
    """Scan a digital phantom.

    Parameters
    ----------
    setup : Setup
        The scan.
    machine : Scan, optional
        The same scan already on the scanner, so that `true_values` can share its noise-free images.

    Returns
    -------
    Acquisition
        All repeats, with the settings that a header would hold; no files.
    """
    machine = Scan(setup) if machine is None else machine
    spacing = setup.thickness_mm if setup.spacing_mm is None else setup.spacing_mm
    settings = Settings(
        protocol=setup.protocol,
        sequence=setup.sequence,
        slice_thickness_mm=setup.thickness_mm,
        slice_spacing_mm=spacing,
        pixel_mm=setup.pixel_mm,
        matrix=setup.matrix,
        repetition_ms=setup.repetition_ms,
        echo_ms=setup.echo_ms,
        flip_deg=setup.flip_deg,
        averages=float(setup.averages),
        bandwidth_hz_per_pixel=setup.bandwidth_hz_per_pixel,
        phase_encode=setup.phase_encode,
        receive_coil=setup.receive_coil,
        frequency_MHz=setup.frequency_MHz,
    )
    scanner = Scanner(
        manufacturer=setup.manufacturer,
        model=setup.model,
        station=setup.station,
        serial=setup.serial,
        field_strength_T=setup.field_strength_T,
        software=setup.software,
    )
    repeats = tuple(
        Series(
            series_instance_uid=uid(setup, "series", k),
            study_instance_uid=uid(setup, "study"),
            description=setup.description,
            acquired_at=setup.started(k),
            kind="magnitude",
            temporal_position=1,
            scanner=scanner,
            settings=settings,
            planes=setup.planes,
            pixels=machine.stack(k),
        )
        for k in range(setup.repeats)
    )
    return Acquisition(repeats=repeats)
