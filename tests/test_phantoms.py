"""The shipped phantoms are the ones designed, and a wrong definition is refused in one sentence."""

import math
from pathlib import Path

import pytest

from qa.errors import PhantomError
from qa.phantoms import Lattice, Ramps, Rods, WedgeBars, load_phantom, phantom_names

SPHERE = """
[about]
title = "Own sphere"
source = "own drawing"
cautions = "none"

[body]
shape = "sphere"
diameter_mm = 150.0
"""


def test_shipped_names():
    assert phantom_names() == ("cylinder-200", "lattice-200", "sectioned-190", "sphere-170", "sphere-any")


@pytest.mark.parametrize(
    ("name", "shape", "diameter", "length"),
    [
        ("sphere-170", "sphere", 170.0, None),
        ("sphere-any", "sphere", None, None),
        ("cylinder-200", "cylinder", 200.0, 300.0),
        ("lattice-200", "cylinder", 230.0, 60.0),
        ("sectioned-190", "cylinder", 190.0, 148.0),
    ],
)
def test_bodies(name, shape, diameter, length):
    body = load_phantom(name).body
    assert (body.shape, body.diameter_mm, body.length_mm, body.region_percent) == (shape, diameter, length, 75.0)


def test_every_definition_says_where_it_comes_from_and_warns():
    for name in phantom_names():
        about = load_phantom(name).about
        assert about.source
        assert "heck" in about.cautions or "hows" in about.cautions


def test_lattice_has_81_rods_within_101_mm():
    (rods,) = load_phantom("lattice-200").sections
    assert isinstance(rods, Rods)
    places = rods.rods_mm()
    assert len(places) == 81
    assert max(math.hypot(x, y) for _, _, x, y in places) == pytest.approx(100.0)
    assert all((x, y) == (20.0 * i, 20.0 * j) for i, j, x, y in places)


def test_sectioned_geometry():
    phantom = load_phantom("sectioned-190")
    ramps = next(s for s in phantom.sections if isinstance(s, Ramps))
    assert [(s.centre_y_mm, s.height_mm, s.slope) for s in ramps.slots] == [(2.0, 5.0, 0.1), (8.0, 5.0, -0.1)]
    assert (ramps.z_from_mm, ramps.z_to_mm) == (-58.0, -42.0)
    wedges = [s for s in phantom.sections if isinstance(s, WedgeBars)]
    assert [w.z_mm for w in wedges] == [-50.0, 50.0]
    lattice = next(s for s in phantom.sections if isinstance(s, Lattice))
    crossings = lattice.crossings_mm()
    assert len(crossings) == 81
    assert (crossings[0][2:], crossings[-1][2:]) == ((-56.0, -56.0), (56.0, 56.0))


def test_uniform_slices_of_the_sectioned_phantom():
    phantom = load_phantom("sectioned-190")
    assert phantom.is_uniform(7.5, 12.5)
    assert not phantom.is_uniform(-12.5, -7.5)
    assert not phantom.is_uniform(-52.5, -47.5)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (("diameter_mm = 150.0", "diameter_mm = -1.0"), "diameter_mm"),
        (("diameter_mm = 150.0", "diametre_mm = 150.0"), "diametre_mm"),
        (("diameter_mm = 150.0", "diameter_mm = nan"), "diameter_mm"),
        (('shape = "sphere"', 'shape = "cube"'), "shape"),
        (('shape = "sphere"', 'shape = "cylinder"'), "length_mm"),
        (('title = "Own sphere"\n', ""), "title"),
        (('title = "Own sphere"', "title = Own sphere"), "TOML"),
    ],
)
def test_wrong_definitions_name_file_and_key(tmp_path, change, said):
    path = tmp_path / "own.toml"
    path.write_text(SPHERE.replace(*change), encoding="utf-8")
    with pytest.raises(PhantomError) as raised:
        load_phantom(path)
    assert str(path) in str(raised.value)
    assert said in str(raised.value)
    assert "\n" not in str(raised.value)


@pytest.mark.parametrize(
    ("section", "said"),
    [
        ('kind = "uniform"\nz_from_mm = 0.0\nz_to_mm = 90.0', "outside the body"),
        ('kind = "uniform"\nz_from_mm = 10.0\nz_to_mm = 0.0', "below"),
        ('kind = "maze"\nz_from_mm = 0.0\nz_to_mm = 10.0', "maze"),
        (
            'kind = "rods"\nz_from_mm = -5.0\nz_to_mm = 5.0\npitch_mm = 20.0\nrod_diameter_mm = 5.0\nreach_mm = 101.0',
            "reaches",
        ),
    ],
)
def test_wrong_sections_are_named(tmp_path, section, said):
    path = tmp_path / "own.toml"
    path.write_text(f"{SPHERE}\n[[section]]\n{section}\n", encoding="utf-8")
    with pytest.raises(PhantomError, match=r"section") as raised:
        load_phantom(path)
    assert said in str(raised.value)


def test_unknown_phantom_lists_those_there_are():
    with pytest.raises(PhantomError, match=r"no phantom 'sphere-180'.*sphere-170"):
        load_phantom("sphere-180")


def test_missing_file_is_named(tmp_path):
    with pytest.raises(PhantomError, match="cannot be read"):
        load_phantom(tmp_path / "gone.toml")


def test_the_hash_is_that_of_the_file():
    import hashlib

    from qa.resources import shipped_folder

    path = Path(shipped_folder("phantoms")) / "sphere-170.toml"
    assert load_phantom("sphere-170").sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
