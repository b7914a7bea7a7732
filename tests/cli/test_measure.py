"""`evenfield measure`: the JSON that others rely on, and a clear sentence for whatever is wrong with the files."""

import json
import shutil

import numpy as np
import pydicom
import pytest
from pydicom.uid import generate_uid


def _spoil(source, target, change, *, seed):
    """Copy one file of a good scan as a series of its own, with something wrong with it."""
    dataset = pydicom.dcmread(source)
    rng_uid = f"1.2.826.0.1.3680043.8.498.77.{seed}"
    dataset.SeriesInstanceUID = rng_uid
    dataset.StudyInstanceUID = f"{rng_uid}.1"
    dataset.SOPInstanceUID = dataset.file_meta.MediaStorageSOPInstanceUID = f"{rng_uid}.2"
    change(dataset)
    dataset.save_as(target)


def _pixels(function):
    def change(dataset):
        dataset.PixelData = function(dataset.pixel_array.astype(float)).clip(0, 65535).astype("<u2").tobytes()

    return change


def _ellipse(image):
    rows, columns = image.shape
    y, x = np.mgrid[:rows, :columns]
    inside = ((x - columns / 2) / 85) ** 2 + ((y - rows / 2) / 68) ** 2 < 1
    rng = np.random.default_rng(3)
    return np.abs(8000.0 * inside + rng.normal(0, 60, image.shape))


def _cut(image):
    return np.roll(image, image.shape[1] // 2, axis=1) * (np.arange(image.shape[1]) > image.shape[1] // 2)


def _half_outside(image):
    shift = image.shape[1] // 2 - 20
    moved = np.zeros_like(image)
    moved[:, shift:] = image[:, :-shift]
    return moved


NOT_THE_PHANTOM = {
    "all zero": (_pixels(np.zeros_like), "no signal"),
    "noise only": (
        _pixels(lambda image: np.abs(np.random.default_rng(1).normal(0, 60, image.shape))),
        "nothing stands out",
    ),
    "half outside": (_pixels(_half_outside), "edge of the image"),
    "ellipse": (_pixels(_ellipse), "out of round"),
}


def _drop(keyword):
    def change(dataset):
        delattr(dataset, keyword)

    return change


def _set(keyword, value):
    def change(dataset):
        setattr(dataset, keyword, value)

    return change


def _to_ct(dataset):
    dataset.Modality = "CT"
    dataset.SOPClassUID = dataset.file_meta.MediaStorageSOPClassUID = "1.2.840.10008.5.1.4.1.1.2"


def _to_colour(dataset):
    rows, columns = dataset.Rows, dataset.Columns
    dataset.SamplesPerPixel, dataset.PhotometricInterpretation, dataset.PlanarConfiguration = 3, "RGB", 0
    dataset.BitsAllocated, dataset.BitsStored, dataset.HighBit = 8, 8, 7
    dataset.PixelData = bytes(rows * columns * 3)
    dataset["PixelData"].VR = "OB"


def _nan(dataset):
    image = dataset.pixel_array.astype("<f4")
    image[3, 3] = np.nan
    del dataset.PixelData
    for keyword in ("BitsStored", "HighBit", "PixelRepresentation"):
        delattr(dataset, keyword)
    dataset.BitsAllocated = 32
    dataset.FloatPixelData = image.tobytes()


def _a_patient(dataset):
    dataset.PatientName, dataset.PatientBirthDate, dataset.PatientSex = "Invented^Person", "19700101", "F"
    dataset.PatientID = "4711-0815"


REFUSED = {
    "zero rows": (_set("Rows", 0), "Rows"),
    "no orientation": (_drop("ImageOrientationPatient"), "Orientation"),
    "no spacing": (_drop("PixelSpacing"), "Spacing"),
    "not a number": (_nan, "number"),
    "ct": (_to_ct, "CT"),
    "colour": (_to_colour, "colour"),
    "patient": (_a_patient, "person"),
}


@pytest.fixture
def folder(scans, tmp_path):
    """A good pair, to which the tests add what is wrong."""
    place = tmp_path / "scans"
    shutil.copytree(scans(), place)
    return place


def _good(document):
    return [a for a in document["acquisitions"] if len(a["measurements"]) >= 10]


def test_json_holds_what_was_promised(evenfield, folder):
    status, out, err = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    document = json.loads(out)
    assert (status, err) == (0, "")
    assert (document["format"], document["version"]) == ("evenfield-measurements", 1)
    assert set(document) == {"format", "version", "software", "acquisitions", "refused"}
    assert document["software"]["name"] == "evenfield"
    (one,) = document["acquisitions"]
    assert len(one["series"]) == 2
    assert one["phantom"] == "sphere-170"
    assert one["acquired_at"] == "2026-11-23T07:42:10"
    assert {"manufacturer", "model", "station", "serial", "field_strength_T"} <= set(one["scanner"])
    settings = one["settings"]
    assert (settings["repetition_ms"], settings["echo_ms"], settings["phase_encode"]) == (500, 20, "column")
    assert (settings["pixel_mm"], settings["matrix"], settings["slice_thickness_mm"]) == ([1, 1], [256, 256], 5)
    assert {"centre_mm", "rotation_deg", "standard_uncertainty_mm"} <= set(one["pose"])
    names = [m["quantity"] for m in one["measurements"]]
    assert len(names) == len(set(names))
    assert {"snr", "snr_background", "uniformity_piu", "ghosting", "length_0", "centre_frequency"} <= set(names)
    for measurement in one["measurements"]:
        assert set(measurement) == {
            "quantity", "value", "unit", "standard_uncertainty", "method", "method_version", "slice", "details",
        }  # fmt: skip
        assert measurement["standard_uncertainty"] >= 0
    assert {"quantity": "slice_thickness", "reason": "this phantom has no ramps"} in one["not_measured"]


def test_table_for_people(evenfield, folder):
    status, out, err = evenfield("measure", folder, "--phantom", "sphere-170")
    assert (status, err) == (0, "")
    assert "2 repeats" in out
    assert any(line.startswith("snr ") for line in out.splitlines())
    assert all(line == line.rstrip() for line in out.splitlines())


@pytest.mark.parametrize("what", NOT_THE_PHANTOM)
def test_what_is_not_the_phantom_is_said(evenfield, folder, what):
    change, said = NOT_THE_PHANTOM[what]
    _spoil(next(folder.glob("s0/*.dcm")), folder / "odd.dcm", change, seed=1)
    status, out, _ = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    document = json.loads(out)
    assert status == 3
    assert len(_good(document)) == 1
    (odd,) = [a for a in document["acquisitions"] if a not in _good(document)]
    assert {m["quantity"] for m in odd["measurements"]} <= {"centre_frequency"}
    assert any(said in remark for remark in odd["remarks"]), odd["remarks"]


@pytest.mark.parametrize("what", REFUSED)
def test_a_wrong_file_is_refused_and_the_good_ones_measured(evenfield, folder, what):
    change, said = REFUSED[what]
    _spoil(next(folder.glob("s0/*.dcm")), folder / "wrong.dcm", change, seed=2)
    status, out, err = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    document = json.loads(out)
    assert status == 3
    assert len(_good(document)) == 1
    (refused,) = document["refused"]
    assert refused["path"].endswith("wrong.dcm")
    assert said in refused["reason"]
    assert "\n" not in refused["reason"]
    for secret in ("Invented^Person", "Invented Person", "19700101", "4711"):
        assert secret not in out + err


@pytest.mark.parametrize(("content", "said"), [(b"hello", "not a DICOM file"), (b"", "empty"), (b"\0" * 128 + b"DICM", "")])
def test_what_is_no_image_is_refused(evenfield, folder, content, said):
    (folder / "text.dcm").write_bytes(content)
    status, out, _ = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    document = json.loads(out)
    assert status == 3
    assert len(_good(document)) == 1
    (refused,) = document["refused"]
    assert said in refused["reason"]


@pytest.mark.parametrize("share", [0.3, 0.9, 0.999])
def test_a_truncated_file_is_refused(evenfield, folder, share):
    content = next(folder.glob("s0/*.dcm")).read_bytes()
    (folder / "cut.dcm").write_bytes(content[: int(share * len(content))])
    status, out, _ = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    document = json.loads(out)
    assert status == 3
    assert len(_good(document)) == 1
    assert len(document["refused"]) == 1


def test_an_empty_folder(evenfield, tmp_path):
    status, out, err = evenfield("measure", tmp_path, "--phantom", "sphere-170", "--json")
    assert status == 3
    assert json.loads(out)["acquisitions"] == []
    assert "no DICOM image was found" in err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("measure", "nowhere", "--phantom", "sphere-170"), "nowhere"),
        (("measure", ".", "--phantom", "sphere-180"), "sphere-180"),
        (("measure", "."), "--phantom"),
        (("dance",), "dance"),
    ],
)
def test_a_wrong_command_line(evenfield, tmp_path, monkeypatch, words, said):
    monkeypatch.chdir(tmp_path)
    status, out, err = evenfield(*words)
    assert status == 2
    assert out == ""
    assert said in err
    assert "Traceback" not in err


def test_same_file_twice_is_read_once(evenfield, folder):
    shutil.copy(next(folder.glob("s0/*.dcm")), folder / "copy.dcm")
    status, out, _ = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    assert status == 0
    assert len(_good(json.loads(out))) == 1


def test_a_file_of_another_number(evenfield, folder):
    """A single image of the same settings in another study is an acquisition of its own."""

    def change(dataset):
        dataset.StudyInstanceUID = generate_uid(entropy_srcs=["another"])

    _spoil(next(folder.glob("s0/*.dcm")), folder / "other.dcm", change, seed=3)
    status, out, _ = evenfield("measure", folder, "--phantom", "sphere-170", "--json")
    assert status == 0
    assert sorted(len(a["series"]) for a in json.loads(out)["acquisitions"]) == [1, 2]
