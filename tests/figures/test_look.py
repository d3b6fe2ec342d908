"""Colours that all readers can tell apart, and files that carry their record."""

from __future__ import annotations

import io
import itertools
import struct
import xml.etree.ElementTree as ElementTree

import matplotlib
import numpy as np
import pytest
from PIL import Image
from pydantic import ValidationError

from odograph.figures.card import draw_card
from odograph.figures.colours import (
    PAPER,
    TERM_COLOURS,
    TERM_MARKS,
    VERDICT_COLOURS,
    compass_colours,
    lab_to_srgb,
    model_label,
    term_colour,
)
from odograph.figures.style import figure_bytes, figure_style, new_figure, rate_colours, save_figure
from odograph.settings.figures import FiguresSettings


def linear(rgb: np.ndarray) -> np.ndarray:
    """sRGB to linear light (IEC 61966-2-1)."""
    rgb = np.asarray(rgb, float)
    return np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)


def luminance(colour) -> float:
    """Relative luminance (W3C Web Content Accessibility Guidelines 2.1)."""
    return float(linear(matplotlib.colors.to_rgb(colour)) @ np.array([0.2126, 0.7152, 0.0722]))


def contrast(one, other) -> float:
    """Contrast ratio (W3C Web Content Accessibility Guidelines 2.1)."""
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def to_lab(rgb: np.ndarray) -> np.ndarray:
    """sRGB to CIE L*a*b* with white D65, by the definition (CIE 15): the way back of what is tested."""
    matrix = np.array(
        [
            [0.4124564, 0.3575761, 0.1804375],
            [0.2126729, 0.7151522, 0.0721750],
            [0.0193339, 0.1191920, 0.9503041],
        ]
    )
    t = linear(rgb) @ matrix.T / np.array([0.95047, 1.0, 1.08883])
    f = np.where(t > (6 / 29) ** 3, np.cbrt(t), t / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.stack([116 * f[:, 1] - 16, 500 * (f[:, 0] - f[:, 1]), 200 * (f[:, 1] - f[:, 2])], axis=1)


# Red-blind and green-blind vision, on linear light: Machado, Oliveira & Fernandes 2009, IEEE Transactions on
# Visualization and Computer Graphics 15:1291, severity 1.0; recalled from memory.
DEFICIENCIES = {
    "protanopia": [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ],
    "deuteranopia": [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ],
}


def seen(rgb: np.ndarray, deficiency: str | None) -> np.ndarray:
    """Colours as a reader sees them, in L*a*b*."""
    if deficiency is None:
        return to_lab(rgb)
    changed = np.clip(linear(rgb) @ np.array(DEFICIENCIES[deficiency]).T, 0, 1)
    return to_lab(np.where(changed <= 0.0031308, 12.92 * changed, 1.055 * changed ** (1 / 2.4) - 0.055))


def test_lab_conversion_of_the_primaries():
    # L*a*b* of the sRGB primaries and of mid grey; handbook values recalled from memory, two decimals.
    lab = [[53.24, 80.09, 67.20], [87.73, -86.18, 83.18], [32.30, 79.19, -107.86], [100, 0, 0], [0, 0, 0]]
    rgb = [[1, 0, 0], [0, 1, 0], [0, 0, 1], [1, 1, 1], [0, 0, 0]]
    np.testing.assert_allclose(lab_to_srgb(np.array(lab)), rgb, atol=0.004)


@pytest.mark.parametrize("deficiency", [None, *DEFICIENCIES])
def test_compass_tells_directions_a_quarter_turn_apart(deficiency):
    lab = seen(compass_colours(72), deficiency)
    for turn in (18, 36):
        apart = np.linalg.norm(lab - np.roll(lab, turn, axis=0), axis=1)
        assert apart.min() > 15


def test_compass_is_cyclic_and_stands_out_from_paper():
    lab = to_lab(compass_colours(72))
    steps = np.linalg.norm(np.diff(np.vstack([lab, lab[:1]]), axis=0), axis=1)
    assert steps[-1] <= steps.max() < 2.5 * np.median(steps)
    assert np.linalg.norm(lab - [100, 0, 0], axis=1).min() > 30


@pytest.mark.parametrize("deficiency", [None, *DEFICIENCIES])
def test_terms_differ_for_every_reader(deficiency):
    rgb = np.array([matplotlib.colors.to_rgb(colour) for colour in TERM_COLOURS.values()])
    for one, other in itertools.combinations(seen(rgb, deficiency), 2):
        assert np.linalg.norm(one - other) > 20
        assert deficiency or abs(one[0] - other[0]) > 8, "the two are alike in grey"
    assert len(set(TERM_MARKS.values())) == len(TERM_MARKS)


def test_colours_have_contrast_to_paper():
    # W3C Web Content Accessibility Guidelines 2.1: 3:1 for graphics, 4.5:1 for text.
    assert all(contrast(colour, PAPER) >= 3 for colour in TERM_COLOURS.values())
    assert all(contrast(colour, PAPER) >= 4.5 for colour in VERDICT_COLOURS.values())
    assert contrast(term_colour("theta_phase"), PAPER) >= 3


@pytest.mark.parametrize("name", ["viridis", "cividis", "magma", "inferno", "plasma"])
def test_rate_scales_grow_lighter_throughout(name):
    scale = rate_colours(FiguresSettings(rate_colour_map=name))(np.linspace(0, 1, 64))[:, :3]
    assert (np.diff(to_lab(scale)[:, 0]) > 0).all()


def test_names_as_text():
    assert model_label("position+head_direction") == "position + head direction"


@pytest.mark.parametrize("formats", [("svg",), ("png", "png"), ("gif", "png")])
def test_formats_are_checked(formats):
    with pytest.raises(ValidationError):
        FiguresSettings(formats=formats)


def drawn(settings: FiguresSettings):
    with figure_style(settings):
        figure = new_figure(3, 2, settings)
        axes = figure.add_subplot()
        axes.plot([0, 1], [2, 3])
        axes.set_title("a line")
    return figure


def png_texts(content: bytes) -> dict[str, str]:
    """Text chunks of a PNG, read by the layout of ISO/IEC 15948."""
    found, place = {}, 8
    while place < len(content):
        size, kind = struct.unpack(">I4s", content[place : place + 8])
        if kind == b"tEXt":
            key, _, value = content[place + 8 : place + 8 + size].partition(b"\0")
            found[key.decode("latin-1")] = value.decode("latin-1")
        place += size + 12
    return found


def test_png_carries_its_record(settings, record_id):
    texts = png_texts(figure_bytes(drawn(settings), "png", record_id, "a title"))
    assert texts["odograph-record"] == record_id
    assert texts["Title"] == "a title"
    assert "Software" not in texts


def test_svg_carries_its_record(settings, record_id):
    root = ElementTree.fromstring(figure_bytes(drawn(settings), "svg", record_id, "a title"))
    assert [e.text for e in root.iter("{http://purl.org/dc/elements/1.1/}identifier")] == [record_id]
    assert f"record {record_id[7:19]}" in "".join(root.itertext())


def test_pdf_carries_its_record(settings, record_id):
    content = figure_bytes(drawn(settings), "pdf", record_id, "a title")
    assert b"/Keywords (" + record_id.encode() + b")" in content
    assert b"CreationDate" not in content


@pytest.mark.parametrize("file_format", ["png", "svg", "pdf"])
def test_bytes_are_fixed_whatever_the_user_has_set(settings, record_id, file_format):
    first = figure_bytes(drawn(settings), file_format, record_id, "t")
    with matplotlib.rc_context(
        {"lines.linewidth": 9, "font.size": 20, "svg.hashsalt": "other", "savefig.dpi": 300}
    ):
        before = dict(matplotlib.rcParams)
        second = figure_bytes(drawn(settings), file_format, record_id, "t")
        assert dict(matplotlib.rcParams) == before
    assert first == second
    assert first != figure_bytes(drawn(settings), file_format, "record:" + "9" * 64, "t")


def test_stamp_does_not_pile_up(settings, record_id):
    figure = drawn(settings)
    assert figure_bytes(figure, "png", record_id, "t") == figure_bytes(figure, "png", record_id, "t")


def test_saving_replaces_and_leaves_nothing_beside(settings, record_id, tmp_path):
    path = tmp_path / "new" / "figure.png"
    for _ in range(2):
        save_figure(drawn(settings), path, record_id, "t")
    assert [entry.name for entry in path.parent.iterdir()] == ["figure.png"]
    assert Image.open(path).size == (216, 144)


def test_unknown_format_is_named(settings, record_id):
    with pytest.raises(ValueError, match="gif"):
        figure_bytes(drawn(settings), "gif", record_id, "t")


def test_a_finer_resolution_is_a_larger_picture(settings, record_id):
    content = figure_bytes(drawn(settings), "png", record_id, "t", dpi=144)
    assert Image.open(io.BytesIO(content)).size == (432, 288)


def test_drawing_leaves_no_trace_in_matplotlib(settings, unit_row, unit_scores, curves, behaviour, corners):
    before = dict(matplotlib.rcParams)
    draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    assert dict(matplotlib.rcParams) == before
