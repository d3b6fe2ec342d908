"""Small pictures for the page: right pixels, right curve, few bytes."""

from __future__ import annotations

import base64
import io
import re
import xml.etree.ElementTree as ElementTree

import numpy as np
import pytest
from PIL import Image

from odograph.figures.miniature import DRAWN_FROM, draw_miniature, palette_png


def test_png_decodes_to_the_same_pixels():
    # Decoded by Pillow, a general-purpose library that had no part in writing it.
    pixels = np.array([[0, 1, 2], [2, 1, 0]], dtype=np.uint8)
    palette = np.array([[0, 0, 0], [10, 20, 30], [200, 100, 50]], dtype=np.uint8)
    read = np.asarray(Image.open(io.BytesIO(palette_png(pixels, palette))).convert("RGBA"))
    assert read.shape == (2, 3, 4)
    np.testing.assert_array_equal(read[..., 3], np.where(pixels == 0, 0, 255))
    seen = pixels > 0
    np.testing.assert_array_equal(read[seen][:, :3], palette[pixels[seen]])


def test_map_has_its_top_row_first_and_the_unvisited_clear(curves, settings):
    svg = draw_miniature(curves, settings).map
    data = re.search(r"base64,([^\"]+)", svg).group(1)
    image = np.asarray(Image.open(io.BytesIO(base64.b64decode(data))).convert("RGBA"))
    assert image[-1, 0, 3] == 0, "cell (0, 0) is the lower left one"
    assert (image[..., 3] == 0).sum() == 1
    brightest = np.unravel_index(image[..., :3].sum(axis=2).argmax(), (10, 10))
    peak = np.unravel_index(np.nanargmax(curves["position_observed_hz"][::-1]), (10, 10))
    assert brightest == peak


def test_curves_are_drawn_to_scale(curves, settings):
    svg = ElementTree.fromstring(draw_miniature(curves, settings).speed)
    points = np.array([[float(v) for v in p.split(",")] for p in svg.find("polyline").get("points").split()])
    rate = curves["speed_rate_hz"]
    assert len(points) == len(rate)
    height = points[:, 1].max() - points[:, 1]
    expected = (rate - rate.min()) / np.ptp(rate) * height.max()
    np.testing.assert_allclose(height, expected, atol=0.11)
    assert svg.get("aria-label") == f"speed, peak {rate.max():.1f} Hz"


def test_the_arrays_that_are_named_are_all_that_is_drawn_from(curves, settings):
    named = {name: values for name, values in curves.items() if name in DRAWN_FROM}
    assert set(named) == DRAWN_FROM
    assert len(named) < len(curves)
    assert draw_miniature(named, settings) == draw_miniature(curves, settings)
    for name in DRAWN_FROM:
        fewer = {other: values for other, values in curves.items() if other != name}
        assert draw_miniature(fewer, settings) != draw_miniature(curves, settings), name


def test_pictures_are_small(curves, settings):
    picture = draw_miniature(curves, settings)
    assert sum(len(part) for part in (picture.map, picture.head_direction, picture.speed)) < 6000


@pytest.mark.parametrize(
    "curves_given", [{}, {"spike_bins": np.array([1])}, {"position_observed_hz": np.full((3, 3), np.nan)}]
)
def test_nothing_to_draw_is_empty(curves_given, settings):
    picture = draw_miniature(curves_given, settings)
    assert (picture.map, picture.head_direction, picture.speed) == ("", "", "")


def test_silent_map(settings):
    assert "peak 0.0 Hz" in draw_miniature({"position_observed_hz": np.zeros((4, 4))}, settings).map
