"""Which scanner a header means, and what was expected of it; a reason never repeats what may be a person's data."""

from dataclasses import asdict
from fnmatch import fnmatchcase
from typing import Any

from qa.records import Settings
from qa.site.load import Site
from qa.site.tables import Expectation, SiteScanner

__all__ = ["changed_settings", "expectation_for", "is_phantom_identity", "match_scanner"]

_SHOWN = 64
_RELATIVE = 0.005
"""Settings are written rounded (0.98 for 0.9765625); a real change of protocol is larger than half a per cent."""


def match_scanner(site: Site, station: str, serial: str) -> SiteScanner | str:
    """Find the scanner whose `match` agrees with a header.

    Parameters
    ----------
    site : Site
        The department.
    station, serial : str
        Station Name and Device Serial Number as the header gives them.

    Returns
    -------
    SiteScanner or str
        The scanner, the one with most keys to match where several agree; or a plain reason why there is none.
    """
    agreeing = [s for s in site.scanners if s.match.agrees(station, serial)]
    if not agreeing:
        return (
            f"the header's station name {_short(station)} and serial number {_short(serial)} are those of no scanner in "
            "site.toml: add the scanner, or correct its match"
        )
    most = max(s.match.keys for s in agreeing)
    best = [s for s in agreeing if s.match.keys == most]
    if len(best) > 1:
        return f"the header could mean {' or '.join(s.name for s in best)}: give both station and serial in their match"
    return best[0]


def expectation_for(site: Site, scanner: SiteScanner, series_description: str, patient_id: str) -> Expectation | str:
    """Find what was expected: the identity is looked at first, and only where it is a phantom's the series.

    Parameters
    ----------
    site : Site
        The department.
    scanner : SiteScanner
        The scanner the series came from.
    series_description, patient_id : str
        Series Description and Patient ID as the header gives them.

    Returns
    -------
    Expectation or str
        The first expectation that fits, those that name the scanner before those for any; or a plain reason. The reason
        holds nothing of the header until the identity has been found to be a phantom's.
    """
    of_scanner = [e for e in site.expectations if any(fnmatchcase(scanner.name, p) for p in e.scanner)]
    if not of_scanner:
        return f"site.toml expects nothing of {scanner.name}: add an [[expect]] for it"
    of_scanner.sort(key=lambda e: "*" in e.scanner)
    of_identity = [e for e in of_scanner if fnmatchcase(patient_id.strip(), e.patient_id)]
    if not of_identity:
        allowed = " or ".join(sorted({repr(e.patient_id) for e in of_scanner}))
        return f"the patient ID is not that of a phantom, which would match {allowed}: it was not opened any further"
    for expectation in of_identity:
        if fnmatchcase(series_description.strip(), expectation.series):
            return expectation
    wanted = " or ".join(sorted({repr(e.series) for e in of_identity}))
    return f"the series description {_short(series_description)} is not expected of {scanner.name}: it would match {wanted}"


def _short(text: str) -> str:
    text = text.strip()
    return repr(text if len(text) <= _SHOWN else text[:_SHOWN] + "...")


def is_phantom_identity(site: Site, patient_id: str) -> bool:
    """Tell whether a Patient ID is one that any expectation takes for a phantom's; what is not is left unseen."""
    return any(fnmatchcase(patient_id.strip(), e.patient_id) for e in site.expectations)


def changed_settings(expectation: Expectation, settings: Settings) -> tuple[str, ...]:
    """Compare a series' settings with those expected of it.

    Returns
    -------
    tuple of str
        A plain sentence for each setting that differs; empty where all agree.
    """
    found = asdict(settings)
    return tuple(
        f"{name} is {_shown(found[name])}, expected {_shown(wanted)}"
        for name, wanted in expectation.settings.items()
        if not _agrees(wanted, found[name])
    )


def _agrees(wanted: Any, found: Any) -> bool:  # noqa: ANN401 - numbers, pairs, texts and switches
    if found is None or found == "":
        return wanted in (None, "", "*")
    if isinstance(wanted, tuple):
        return len(wanted) == len(found) and all(_agrees(w, f) for w, f in zip(wanted, found, strict=True))
    if isinstance(wanted, float):
        return bool(abs(found - wanted) <= _RELATIVE * abs(wanted) + 1e-9)
    if isinstance(wanted, str):
        return fnmatchcase(found.strip(), wanted)
    return bool(wanted == found)


def _shown(value: Any) -> str:  # noqa: ANN401 - numbers, pairs, texts and switches
    if value is None or value == "":
        return "not stated"
    if isinstance(value, tuple):
        return " x ".join(f"{v:g}" for v in value)
    return f"{value:g}" if isinstance(value, float) else repr(value)
