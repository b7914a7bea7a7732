"""DICOM files of digital scans: the same bytes from the same seed, and objects that independent programs accept."""

import os
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from pydicom import dcmread

from qa.dicom import read
from qa.phantoms import load_phantom
from qa.simulate import Setup, default_setup, simulate, write_dicom

KINDS = [pytest.param(False, id="classic"), pytest.param(True, id="enhanced")]
SMALL = {"matrix": (128, 120), "pixel_mm": (1.6, 1.7), "spacing_mm": 8.0}
VARIANTS = [
    {},
    {"channels": 4, "sequence": "GRE", "flip_deg": 20.0, "partial_fourier": 0.75, "phase_encode": "row", "slices": 3},
    {"acquired_fraction": 0.8, "apodisation": "hann", "repeats": 1, "slices": 2},
]


def _scan(**changes: object) -> Setup:
    return default_setup(load_phantom("cylinder-200"), **(SMALL | {"matrix": (150, 140)} | changes))


def _bytes(setup: Setup, folder: Path, *, enhanced: bool) -> list[bytes]:
    return [path.read_bytes() for path in write_dicom(setup, folder, enhanced=enhanced)]


@pytest.mark.parametrize("enhanced", KINDS)
def test_files_hold_what_was_simulated(tmp_path, enhanced):
    setup = _scan(slices=3, row_direction=(1.0, 0.0, 0.0), column_direction=(0.0, 0.0, -1.0), rotation_deg=5.0)
    acquisition = simulate(setup)
    paths = write_dicom(setup, tmp_path, enhanced=enhanced)
    assert len(paths) == (2 if enhanced else 6)
    for path, series in zip(paths[:: 1 if enhanced else 3], acquisition.repeats, strict=True):
        ds = dcmread(path)
        assert ds.SeriesInstanceUID == series.series_instance_uid
        assert ds.PatientID == "QA-cylinder-200"
        assert ds.PatientName == "QA^Phantom"
        assert not ds.PatientBirthDate
        pixels = ds.pixel_array if enhanced else ds.pixel_array[None]
        assert np.array_equal(pixels, series.pixels[: len(pixels)])
    ds = dcmread(paths[0])
    groups = ds.SharedFunctionalGroupsSequence[0] if enhanced else ds
    spacing = groups.PixelMeasuresSequence[0].PixelSpacing if enhanced else ds.PixelSpacing
    assert [float(v) for v in spacing] == [1.6, 1.7]
    if enhanced:
        place = ds.PerFrameFunctionalGroupsSequence[2].PlanePositionSequence[0].ImagePositionPatient
    else:
        place = dcmread(paths[2]).ImagePositionPatient
    assert [float(v) for v in place] == pytest.approx(setup.planes[2].position_patient)


@pytest.mark.parametrize("enhanced", KINDS)
def test_what_the_program_reads_is_the_record_that_was_simulated(tmp_path, enhanced):
    setup = _scan(slices=3, channels=2, phase_encode="row", tilt_x_deg=1.0)
    write_dicom(setup, tmp_path, enhanced=enhanced)
    reading = read(tmp_path)
    assert reading.refused == ()
    (found,), wanted = reading.acquisitions, simulate(setup)
    # only the enhanced object says that there was no parallel imaging
    assert replace(found.settings, parallel_imaging=None) == wanted.settings
    assert found.scanner == wanted.scanner
    for one, other in zip(found.repeats, wanted.repeats, strict=True):
        assert np.array_equal(one.pixels, other.pixels)
        assert one.acquired_at == other.acquired_at
        assert one.description == other.description
        for plane, same in zip(one.planes, other.planes, strict=True):
            assert plane.position_patient == pytest.approx(same.position_patient, abs=1e-9)


@pytest.mark.parametrize("enhanced", KINDS)
def test_the_same_seed_gives_the_same_bytes_on_any_number_of_workers(tmp_path, enhanced):
    from joblib import Parallel, delayed

    setups = [_scan(seed=seed, channels=2, matrix=(140, 140)) for seed in (1, 2)]
    alone = [_bytes(setup, tmp_path / f"alone{setup.seed}", enhanced=enhanced) for setup in setups]
    wide = Parallel(n_jobs=2)(delayed(_bytes)(setup, tmp_path / f"wide{setup.seed}", enhanced=enhanced) for setup in setups)
    assert alone == wide
    assert alone[0] != alone[1]


def test_each_object_has_its_own_identifier(tmp_path):
    classic = write_dicom(_scan(slices=3), tmp_path / "a")
    other = write_dicom(_scan(slices=3, seed=4), tmp_path / "b")
    objects = [dcmread(path, stop_before_pixels=True) for path in classic + other]
    assert len({ds.SOPInstanceUID for ds in objects}) == 12
    assert len({ds.SeriesInstanceUID for ds in objects}) == 4
    assert len({ds.StudyInstanceUID for ds in objects}) == 2
    assert all(len(ds.SOPInstanceUID) <= 64 for ds in objects)


_BESIDE = str(Path(sys.executable).parent)
_DCIODVFY = shutil.which("dciodvfy", path=f"{_BESIDE}{os.pathsep}{os.environ.get('PATH', '')}")


@pytest.mark.skipif(_DCIODVFY is None, reason="dciodvfy (dicom3tools) is not installed")
@pytest.mark.parametrize("enhanced", KINDS)
@pytest.mark.parametrize("changes", VARIANTS)
def test_dciodvfy_finds_no_error(tmp_path, enhanced, changes):
    path = write_dicom(_scan(**changes), tmp_path, enhanced=enhanced)[0]
    said = subprocess.run([_DCIODVFY, path], capture_output=True, text=True, check=False)
    lines = (said.stdout + said.stderr).splitlines()
    assert any(line.strip() == ("EnhancedMRImage" if enhanced else "MRImage") for line in lines)
    assert [line for line in lines if line.startswith("Error")] == []


@pytest.mark.skipif(shutil.which("dcmdump") is None, reason="dcmdump (dcmtk) is not installed")
@pytest.mark.parametrize("enhanced", KINDS)
def test_dcmdump_reads_the_files(tmp_path, enhanced):
    setup = _scan(slices=2)
    path = write_dicom(setup, tmp_path, enhanced=enhanced)[0]
    said = subprocess.run(
        ["dcmdump", "-q", "+P", "Rows", "+P", "ImagingFrequency", path], capture_output=True, text=True, check=True
    )
    assert "150" in said.stdout
    assert said.stderr == ""


_TO_PGM = shutil.which("dcm2img") or shutil.which("dcm2pnm")


@pytest.mark.skipif(_TO_PGM is None, reason="dcm2img or dcm2pnm (dcmtk) is not installed")
@pytest.mark.parametrize("enhanced", KINDS)
def test_dcmtk_decodes_the_same_pixels(tmp_path, enhanced):
    setup = _scan(slices=2)
    path = write_dicom(setup, tmp_path, enhanced=enhanced)[0]
    out = tmp_path / "first.pgm"
    subprocess.run([_TO_PGM, "+opw", path, out], capture_output=True, check=True)
    kind, columns, rows, most, *values = out.read_text().split()
    assert (kind, columns, rows, most) == ("P2", "140", "150", "65535")
    assert np.array_equal(np.array(values, dtype=float).reshape(150, 140), simulate(setup).pixels[0])
