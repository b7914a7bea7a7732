import numpy as np
import pytest
from scipy.ndimage import gaussian_filter, map_coordinates

from qa.simulate.fine import FineGrid
from qa.simulate.objects import density, slice_key
from qa.simulate.profile import Profile

CROOKED = {"tilt_x_deg": 1.3, "tilt_y_deg": -1.4, "centre_patient": (3.0, 2.0, 1.5)}


@pytest.mark.parametrize(
    "case",
    [
        pytest.param(("sectioned-190", 0, CROOKED | {"rotation_deg": 7.0}, (70, 105, 124, 140), 60), id="ramps"),
        pytest.param(("sectioned-190", 1, CROOKED | {"rotation_deg": -7.0}, (114, 144, 56, 80), 30), id="wedge bars"),
        pytest.param(("sectioned-190", 4, CROOKED | {"rotation_deg": -7.0}, (150, 186, 70, 90), 12), id="lattice"),
        pytest.param(("lattice-200", 0, CROOKED | {"rotation_deg": 3.0}, (170, 195, 120, 150), 8), id="rods"),
        pytest.param(("sphere-170", 0, {"centre_patient": (0.3, 0.2, 60.0)}, (180, 195, 120, 140), 40), id="sphere"),
        pytest.param(
            ("cylinder-200", 0, {"centre_patient": (0.3, 0.2, 149.0)}, (238, 256, 120, 140), 40), id="end of a cylinder"
        ),
    ],
)
def test_density_is_the_average_of_point_by_point_membership(make, fill, case):
    """The closed forms against brute force: a tenth of a millimetre in the slice, and heights through it."""
    name, slice_index, changes, box, count = case
    setup = make(name, **changes)
    plane = setup.planes[slice_index]
    grid = FineGrid.of(plane)
    step, heights = 0.1, (np.arange(count) + 0.5) / count - 0.5
    x = np.arange(box[0] - 4, box[1] + 4, step)
    y = np.arange(box[2] - 4, box[3] + 4, step)
    xx, yy = np.meshgrid(x, y)
    counted = np.zeros_like(xx)
    for u in heights * setup.thickness_mm:
        local = (plane.to_patient(xx, yy, u) - np.asarray(setup.centre_patient)) @ setup.orientation
        counted += fill(setup.phantom, local[..., 0], local[..., 1], local[..., 2])
    counted = gaussian_filter(counted / heights.size, grid.blur_mm / step, truncate=7)
    columns = np.flatnonzero((grid.x_mm[0] > box[0]) & (grid.x_mm[0] < box[1]))
    rows = np.flatnonzero((grid.y_mm[:, 0] > box[2]) & (grid.y_mm[:, 0] < box[3]))
    at = np.meshgrid((grid.y_mm[rows, 0] - y[0]) / step, (grid.x_mm[0, columns] - x[0]) / step, indexing="ij")
    difference = density(setup, plane, grid)[np.ix_(rows, columns)] - map_coordinates(counted, at, order=1)
    assert abs(difference.mean()) < 1e-3
    assert difference.std() < 3e-3
    assert np.abs(difference).max() < 0.03


def _halves(line, at, level=0.5):
    edges = np.flatnonzero(np.diff(np.signbit(line - level)))
    return at[edges] + (at[1] - at[0]) * (level - line[edges]) / (line[edges + 1] - line[edges])


@pytest.mark.parametrize("name", ["sphere-170", "cylinder-200"])
def test_an_air_bubble_takes_the_top_and_leaves_the_rest(make, name):
    setup = make(name, air_bubble_mm=12.0, rotation_deg=20.0)
    plane = setup.planes[0]
    grid = FineGrid.of(plane)
    bubble, full = density(setup, plane, grid), density(setup.but(air_bubble_mm=0.0), plane, grid)
    y = grid.y_mm[:, 0] - plane.middle_mm[1]
    radius = setup.body_diameter_mm / 2
    column = bubble[:, bubble.shape[1] // 2]
    assert _halves(column, y)[0] == pytest.approx(12 - radius, abs=0.01)
    below = y > 16 - radius
    np.testing.assert_allclose(bubble[below], full[below], atol=1e-9)


def test_in_a_coronal_stack_air_gathers_in_the_front_slices(make):
    setup = make(
        "sphere-170",
        row_direction=(1.0, 0.0, 0.0),
        column_direction=(0.0, 0.0, -1.0),
        slices=3,
        spacing_mm=75.0,
        air_bubble_mm=20.0,
    )
    front, middle, back = (density(setup, plane, FineGrid.of(plane)).sum() for plane in setup.planes)
    assert front == 0
    assert middle > back > 0


def test_a_filling_port_notches_the_outline(make):
    setup = make("sphere-170", filling_port_mm=(16.0, 9.0), port_direction_deg=0.0, rotation_deg=0.0)
    plane = setup.planes[0]
    grid = FineGrid.of(plane)
    notched = density(setup, plane, grid)
    x, y = grid.x_mm[0] - plane.middle_mm[0], grid.y_mm[:, 0] - plane.middle_mm[1]
    row = notched[notched.shape[0] // 2]
    assert _halves(row, x)[-1] == pytest.approx(85 - 9, abs=0.02)
    column = notched[:, int(np.argmin(np.abs(x - 80)))]
    inner = np.abs(y) < 20
    assert np.ptp(_halves(column[inner], y[inner])) == pytest.approx(16, abs=0.02)
    missing = (density(setup.but(filling_port_mm=(0.0, 0.0)), plane, grid) - notched).sum() * 0.25
    assert missing == pytest.approx(16 * 9 - 16**3 / (24 * 85) * 1.0, abs=2.0)


def test_slices_that_look_the_same_share_a_key(make):
    setup = make("sectioned-190")
    keys = [slice_key(setup, plane) for plane in setup.planes]
    assert keys[2] == keys[3] == keys[6] == ()
    assert len({keys[0], keys[1], keys[4], keys[2]}) == 4
    for changed in ({"tilt_x_deg": 1.0}, {"air_bubble_mm": 5.0}):
        other = setup.but(**changed)
        assert slice_key(other, other.planes[6]) is None


@pytest.mark.parametrize("edge", [0.0, 0.6])
def test_the_slice_profile_has_the_width_it_says(edge):
    profile = Profile(5.0, edge)
    heights = np.linspace(-12, 12, 48001)
    shape = profile.density(heights)
    assert np.trapezoid(shape, heights) == pytest.approx(1, abs=2e-4)
    wide = heights[shape > shape.max() / 2]
    assert wide[-1] - wide[0] == pytest.approx(5.0, abs=2e-3)
    summed = np.cumsum(shape) * (heights[1] - heights[0])
    np.testing.assert_allclose(profile.cumulative(heights), summed, atol=3e-4)


@pytest.mark.parametrize("extra", [0.0, 1e-18, 1e-9, 0.3, 50.0])
def test_the_cumulative_profile_runs_from_nothing_to_all(extra):
    profile = Profile(5.0)
    assert profile.cumulative([-1e6, -1e3, 0.0, 1e3, 1e6], extra) == pytest.approx([0, 0, 0.5, 1, 1], abs=1e-7)


@pytest.mark.parametrize("count", [3, 8, 96])
def test_quadrature_over_the_profile_is_exact_to_second_order(count):
    heights, weights = Profile(5.0).nodes(count)
    assert weights.sum() == pytest.approx(1)
    assert weights @ heights**2 == pytest.approx(25 / 12)
