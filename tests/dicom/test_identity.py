import logging
import warnings

import pytest

from qa.dicom import Header, looks_like_a_person, read
from qa.dicom.identity import is_phantom_word
from qa.dicom.reading import read_files

SECRETS = ("Anneliese", "Weatherby", "4471902", "19570312", "1957")


def patient(make, **values):
    values = {"PatientName": "Weatherby^Anneliese", "PatientID": "4471902", "PatientBirthDate": "19570312", **values}
    return make.image(PatientSex="F", SpecificCharacterSet="ISO_IR 100", **values)


def everything_said(reading):
    texts = [each.reason for each in reading.refused]
    for acquisition in reading.acquisitions:
        texts += [repr(acquisition.settings), repr(acquisition.scanner), acquisition.first.description, *acquisition.remarks]
        for series in acquisition.repeats:
            texts += [*series.remarks, repr(series.files)]
    return " ".join(texts)


def test_a_patients_image_is_refused_without_a_site(tmp_path, make):
    make.save(patient(make), tmp_path / "a.dcm")
    reading = read(tmp_path)
    assert reading.acquisitions == ()
    assert "a person, not a phantom" in reading.refused[0].reason
    assert not any(secret in everything_said(reading) for secret in SECRETS)


@pytest.mark.parametrize(
    "changed",
    [
        {"PatientName": "ACR^Phantom"},
        {"PatientName": "Sphere 170"},
        {"PatientName": ""},
        {"PatientID": "QA-sphere"},
        {"PatientBirthDate": ""},
        {"PatientBirthDate": "19000101"},
        {"PatientBirthDate": "20991231"},
    ],
)
def test_a_phantom_registered_half_like_a_person_is_taken_but_never_named(tmp_path, make, changed):
    make.save(patient(make, **changed), tmp_path / "a.dcm")
    reading = read(tmp_path)
    assert len(reading.acquisitions) == 1
    assert not any(secret in everything_said(reading) for secret in SECRETS)


def test_sex_other_speaks_for_an_object(tmp_path, make):
    dataset = patient(make)
    dataset.PatientSex = "O"
    make.save(dataset, tmp_path / "a.dcm")
    assert len(read(tmp_path).acquisitions) == 1


def test_a_birth_date_that_cannot_be_read_still_counts():
    header = Header(names_a_person=True, gives_birth_date=True)
    assert looks_like_a_person(header)
    assert not looks_like_a_person(Header(names_a_person=True))
    assert not looks_like_a_person(Header(gives_birth_date=True))


@pytest.mark.parametrize(
    "name", ["Shimizu^Kenji", "Waters^Ann", "Quality^Joe", "Testa^Maria", "Coiler^B", "Acree^Tom", "Mri^"]
)
def test_surnames_that_hold_a_phantoms_word_are_no_phantoms(name):
    assert is_phantom_word(name) == (name == "Mri^")


@pytest.mark.parametrize("name", ["QA^Weekly", "acr_large", "PHANTOM", "Fantom", "Test^Head", "QA2026", "phantomsphere"])
def test_common_registrations_are_phantoms(name):
    assert is_phantom_word(name)


def test_admission_comes_before_decoding_and_its_reason_is_kept(tmp_path, make):
    make.save(make.image(1), tmp_path / "a.dcm")
    wanted = make.image(2, position=(-10, -12, 10))
    wanted.PatientID = "QA-2"
    make.save(wanted, tmp_path / "b.dcm")
    decoded = []

    def decode(file, layout):
        decoded.append(file)
        return make.pattern((1, layout.rows, layout.columns))

    reading = read_files(tmp_path, lambda header: None if header.patient_id == "QA-2" else "not expected here", None, decode)
    assert len(decoded) == 1
    assert [(each.path.name, each.reason) for each in reading.refused] == [("a.dcm", "not expected here")]


def test_a_refused_file_with_pixels_that_cannot_be_decoded_is_refused_for_who_it_is(tmp_path, make):
    dataset = patient(make)
    dataset.PixelData = dataset.PixelData[:100]
    make.save(dataset, tmp_path / "a.dcm")
    assert "a person" in read(tmp_path).refused[0].reason


def test_the_header_tells_what_a_site_matches_on_and_its_representation_no_number(tmp_path, make):
    make.save(patient(make, PatientName="QA", SeriesDescription="QA sphere"), tmp_path / "a.dcm")
    seen = []
    read(tmp_path, admit=seen.append)
    (header,) = seen
    assert (header.station, header.serial, header.patient_id) == ("NORTH3T", "40071", "4471902")
    assert (header.series_description, header.modality, header.field_strength_T) == ("QA sphere", "MR", 3.0)
    assert header.image_type == ("ORIGINAL", "PRIMARY", "M", "ND")
    assert not any(secret in repr(header) for secret in SECRETS)


def test_nothing_of_a_damaged_header_is_logged_warned_or_raised(tmp_path, make, caplog):
    dataset = patient(make)
    path = make.save(dataset, tmp_path / "a.dcm")
    content = path.read_bytes()
    at = content.index(b"Weatherby")
    damaged = [
        content[: at - 8] + b"\x10\x00\x10\x00DS" + content[at - 2 :],  # the name as a number
        content.replace(b"ISO_IR 100", b"ISO_IR 999"),
        content[: at + 4],
        content.replace(b"19570312", b"Weatherb"),
        content.replace(b"4471902", b"44719\xe902"),
    ]
    for index, each in enumerate(damaged):
        (tmp_path / f"{index}.dcm").write_bytes(each)
    caplog.set_level(logging.DEBUG)
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        reading = read(tmp_path)
    assert caught == []
    assert caplog.records == []
    assert not any(secret in everything_said(reading) for secret in SECRETS)


def test_the_loggers_are_given_back_as_they_were(write_series):
    logger = logging.getLogger("pydicom")
    before = logger.level
    read(write_series(1))
    assert logger.level == before


@pytest.mark.parametrize(
    ("changed", "reason"),
    [
        ({"Modality": "CT"}, "Modality is CT: only MR images are measured"),
        ({"Modality": "WEATHERBY"}, "Modality is not MR: only MR images are measured"),
        ({"SOPClassUID": "1.2.840.10008.5.1.4.1.1.2"}, "it is a CT image: only MR images are measured"),
        ({"SOPClassUID": "1.2.840.10008.5.1.4.1.1.4.2"}, "it holds MR spectra: only MR images are measured"),
        ({"SOPClassUID": "1.2.840.10008.5.1.4.1.1.7"}, "it is a secondary capture: only MR images are measured"),
        ({"SOPClassUID": "1.2.3.4"}, "it is not an MR image object: only MR images are measured"),
    ],
)
def test_what_is_no_mr_image_is_refused(tmp_path, make, changed, reason):
    make.save(make.image(**changed), tmp_path / "a.dcm")
    assert [each.reason for each in read(tmp_path).refused] == [reason]


def test_a_failure_of_the_one_who_admits_is_not_taken_for_a_bad_file(write_series):
    def admit(header):
        raise ValueError(f"the record of {header.station} is gone")

    with pytest.raises(ValueError, match="the record of NORTH3T is gone"):
        read(write_series(1), admit=admit)
