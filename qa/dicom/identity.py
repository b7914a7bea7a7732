"""What a file says it is, before its pixels are looked at, and whether it is taken in.

A person's name, birth date and sex are not kept: only whether they are given. The patient's number is kept because
`site.toml` matches on it, and stays out of every representation.
"""

import re
from dataclasses import dataclass, field
from datetime import date, datetime
from pathlib import Path

__all__ = [
    "Header",
    "is_name_of_a_person",
    "is_phantom_word",
    "is_plausible_birth_date",
    "looks_like_a_person",
    "refuse_people",
    "unmeasurable",
]

_MR_IMAGES = frozenset(
    {
        "1.2.840.10008.5.1.4.1.1.4",  # MR Image Storage
        "1.2.840.10008.5.1.4.1.1.4.1",  # Enhanced MR Image Storage
        "1.2.840.10008.5.1.4.1.1.4.3",  # Enhanced MR Color Image Storage: let through, so that it is refused as colour
        "1.2.840.10008.5.1.4.1.1.4.4",  # Legacy Converted Enhanced MR Image Storage
    }
)
_SPECTRA = "1.2.840.10008.5.1.4.1.1.4.2"
# Named in a reason; whatever else stands in Modality is not repeated.
_OTHER_MODALITIES = frozenset(
    [
        "CR",
        "CT",
        "DX",
        "ES",
        "KO",
        "MG",
        "MS",
        "NM",
        "OP",
        "OT",
        "PR",
        "PT",
        "PX",
        "REG",
        "RF",
        "RTDOSE",
        "RTIMAGE",
        "RTPLAN",
        "RTSTRUCT",
        "SC",
        "SEG",
        "SR",
        "US",
        "XA",
    ]
)
_OTHER_OBJECTS = {
    "1.2.840.10008.5.1.4.1.1.2": "a CT image",
    "1.2.840.10008.5.1.4.1.1.2.1": "a CT image",
    "1.2.840.10008.5.1.4.1.1.7": "a secondary capture",
    "1.2.840.10008.5.1.4.1.1.66": "raw data",
    "1.2.840.10008.5.1.4.1.1.104.1": "a PDF document",
    "1.2.840.10008.1.3.10": "a DICOM directory",
}

# What departments register phantoms under (common practice, no source): "phantom" anywhere, the others as whole words, so
# that a surname that holds one (Shimizu, Waters, Quality) does not count.
_PHANTOM_WORDS = re.compile(
    r"ph?antom|fantom"
    r"|(?<![^\W\d_])(?:qa|qc|iqa|iqc|acr|nema|aapm|nist|mri|snr|tests?|testing|tst|demo|sphere|kugel|cylinder|zylinder|bottle"
    r"|flasche|calibration|constancy|konstanz|konstanzpr[uü]fung|service|coil|spule)(?![^\W\d_])",
    re.IGNORECASE,
)


@dataclass(frozen=True)
class Header:
    """What `site.toml` and the guards decide on, read without decoding a pixel.

    Texts are empty where the header says nothing. `acquired_at` is local time on the scanner's clock. `sha256` is the hash of
    the whole file, by which one that was taken in before is known.
    """

    modality: str = ""
    sop_class_uid: str = ""
    sop_instance_uid: str = ""
    study_instance_uid: str = ""
    series_instance_uid: str = ""
    series_description: str = ""
    protocol: str = ""
    image_type: tuple[str, ...] = ()
    manufacturer: str = ""
    model: str = ""
    station: str = ""
    serial: str = ""
    software: str = ""
    field_strength_T: float | None = None
    acquired_at: datetime | None = None
    path: Path = Path()
    sha256: str = ""
    patient_id: str = field(default="", repr=False)
    names_a_person: bool = field(default=False, repr=False)
    gives_birth_date: bool = field(default=False, repr=False)
    sex_is_other: bool = field(default=False, repr=False)


def is_phantom_word(text: str) -> bool:
    """Tell whether a text holds a word that phantoms are registered under."""
    return _PHANTOM_WORDS.search(text) is not None


def is_name_of_a_person(name: str, patient_id: str) -> bool:
    """Tell a person's name from none and from a phantom's: no digit, no phantom's word in it or in the patient number."""
    letters = any(character.isalpha() for character in name)
    digits = any(character.isdigit() for character in name)
    return letters and not digits and not is_phantom_word(name) and not is_phantom_word(patient_id)


def is_plausible_birth_date(text: str, born: date | None, scanned: datetime | None) -> bool:
    """Tell a real birth date from none and from the placeholders consoles accept (1900 and before, after the scan).

    A date that is given but cannot be read counts as one.
    """
    if born is None:
        return any(character.isdigit() for character in text)
    return born > date(1900, 1, 1) and (scanned is None or born <= scanned.date())


def looks_like_a_person(header: Header) -> bool:
    """Tell whether the header describes a patient, where there is no `site.toml` to say what phantoms are called.

    True when all three hold: a name that no phantom would be registered under, a plausible birth date, and a sex that is
    not "O" (other), which departments use for objects. A name alone is not enough: a phantom may bear its maker's.
    A patient number that holds a phantom's word ("QA-sphere") speaks for a phantom.
    """
    return header.names_a_person and header.gives_birth_date and not header.sex_is_other


def refuse_people(header: Header) -> str | None:
    """Refuse what looks like a patient's image; the admission used when no department folder says what to expect."""
    if looks_like_a_person(header):
        return (
            "the header describes a person, not a phantom (a name, a birth date and no phantom's word): "
            "only images of phantoms are measured; register the phantom with a name or number such as QA-sphere"
        )
    return None


def unmeasurable(header: Header) -> str | None:
    """Say why a file is not an MR image, or None where it is one."""
    if header.modality not in {"MR", ""}:
        named = header.modality if header.modality in _OTHER_MODALITIES else "not MR"
        return f"Modality is {named}: only MR images are measured"
    if header.sop_class_uid == _SPECTRA:
        return "it holds MR spectra: only MR images are measured"
    if header.sop_class_uid in _MR_IMAGES:
        return None
    if header.sop_class_uid:
        return f"it is {_OTHER_OBJECTS.get(header.sop_class_uid, 'not an MR image object')}: only MR images are measured"
    return None if header.modality else "it says neither a modality nor what kind of object it is: only MR images are measured"
