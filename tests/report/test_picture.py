import base64
import io
import re

import numpy as np
import pytest
from matplotlib.image import imread

from qa.geometry import Plane
from qa.records import Picture, Region
from qa.report.picture import draw_picture, grey_window


def picture(pixels, pixel_mm=(1.0, 1.0), regions=()):
    plane = Plane((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.0, 1.0, 0.0), pixel_mm, pixels.shape)
    return Picture("A picture", pixels.astype(np.float32), plane, 3, tuple(regions))


def shown(drawn):
    png = base64.b64decode(re.search(rb"base64,([^\"]+)\"", drawn.svg)[1])
    return imread(io.BytesIO(png), format="png")


def test_pixels_are_shown_as_they_are():
    rng = np.random.default_rng(1)
    pixels = rng.integers(0, 256, (20, 30)).astype(float)
    found = shown(draw_picture(picture(pixels), 100, 100, (0.0, 255.0)))
    assert found.shape == (20, 30)
    assert np.abs(found * 255 - pixels).max() < 0.01


def test_black_is_zero_and_white_ignores_a_few_bright_pixels():
    pixels = np.full((100, 100), 500.0)
    pixels[0, :5] = 1e6
    assert grey_window(picture(pixels)) == (0.0, 500.0)
    pixels[1, 0] = -20
    assert grey_window(picture(pixels))[0] == -20


@pytest.mark.parametrize(("pixel_mm", "ratio"), [((1.0, 1.0), 1.0), ((0.8, 1.0), 0.8), ((1.5, 0.75), 2.0)])
def test_proportions_are_those_of_the_object(pixel_mm, ratio):
    drawn = draw_picture(picture(np.ones((64, 64)), pixel_mm), 100, 100)
    width, height = map(float, re.search(rb'<image x="0" y="0" width="([\d.]+)" height="([\d.]+)"', drawn.svg).groups())
    assert height / width == pytest.approx(ratio, rel=1e-3)
    assert drawn.width_mm <= 100
    assert drawn.height_mm <= 100


def test_a_region_is_drawn_where_it_was_read():
    square = Region("square", "polygon", 3, ((10.0, 20.0), (30.0, 20.0), (30.0, 40.0), (10.0, 40.0)))
    svg = draw_picture(picture(np.ones((100, 100)), regions=[square]), 104.5, 104.5).svg.decode()
    line = next(d for d, style in re.findall(r'<path d="([^"]*)" style="([^"]*)"', svg) if "stroke-width: 0.75" in style)
    x, y = np.array([[float(v) for v in pair] for pair in re.findall(r"[ML] ([\d.]+) ([\d.]+)", line)]).T
    # 100 mm of object over 100 mm of paper, pixel centres at half pixels from the edge.
    assert (x.min(), x.max()) == pytest.approx((10.5 * 72 / 25.4, 30.5 * 72 / 25.4), abs=0.02)
    assert (y.min(), y.max()) == pytest.approx((20.5 * 72 / 25.4, 40.5 * 72 / 25.4), abs=0.02)


def test_regions_of_one_name_share_a_number_and_numbers_keep_apart():
    same = [Region("air", "circle", 3, ((50.0, 50.0),), 3.0) for _ in range(4)]
    other = Region("line", "line", 3, ((50.0, 50.0), (60.0, 50.0)))
    drawn = draw_picture(picture(np.ones((100, 100)), regions=[*same, other]), 100, 100)
    assert [(entry.number, entry.name) for entry in drawn.key] == [(1, "air"), (2, "line")]
    places = np.array(
        [[float(v) for v in pair] for pair in re.findall(r'x="([\d.]+)" y="([\d.]+)"[^>]*>[12]<', drawn.svg.decode())]
    )
    distance = np.hypot(*(places[:, None] - places[None]).transpose(2, 0, 1)) + 1e3 * np.eye(len(places))
    assert len(places) == 5
    assert distance.min() > 5


@pytest.mark.parametrize("pixels", [np.zeros((8, 8)), np.full((8, 8), np.nan), np.ones((1, 1)), np.full((4, 300), 7.0)])
def test_odd_images_are_drawn(pixels):
    drawn = draw_picture(picture(pixels), 80, 80)
    assert shown(drawn).shape[:2] == pixels.shape
    assert drawn.width_mm <= 80.0001
