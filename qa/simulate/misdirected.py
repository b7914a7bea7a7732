"""A series that must be refused: a patient's, sent to the phantoms' inbox by mistake. The patient is invented."""

from pathlib import Path

from qa.simulate.dicom_out import write_dicom
from qa.simulate.setup import Setup

__all__ = ["write_misdirected"]


def write_misdirected(setup: Setup, folder: Path) -> list[Path]:
    """Write one image as a scanner would send a patient's: with a name, a number, a birth date and a sex, all invented.

    Parameters
    ----------
    setup : Setup
        The scan whose scanner it comes from.
    folder : pathlib.Path
        Where to.

    Returns
    -------
    list of pathlib.Path
        The file.
    """
    import pydicom

    one = setup.but(
        repeats=1, slices=1, seed=setup.seed + 7, series_description="Routine", patient_id="4711-0815", channel_gains=None
    )
    paths = write_dicom(one, folder)
    for path in paths:
        dataset = pydicom.dcmread(path)
        dataset.PatientName, dataset.PatientBirthDate, dataset.PatientSex = "Invented^Person", "19700101", "F"
        dataset.save_as(path)
    return paths
