"""Names in pictures are text, whatever they hold, and are drawn as they stand."""

from __future__ import annotations

from xml.etree import ElementTree

import pytest

from odograph.figures.card import draw_card
from odograph.figures.session_quality import draw_session_quality
from odograph.figures.shares import draw_composition
from odograph.figures.style import figure_bytes

HOSTILE = (
    "<script>alert(1)</script>",
    "\"/><a href='x'>",
    "]]><!-- -- x",
    "&amp; &#60; %s {0}",
    "$\\frac{$ and $x^2$",
    "_hidden",
    "\\$ 5 $",
)
SVG = "{http://www.w3.org/2000/svg}"


def texts(figure, record_id, title="a picture"):
    """The texts of the figure as SVG, after a look at its elements."""
    root = ElementTree.fromstring(figure_bytes(figure, "svg", record_id, title))
    for element in root.iter():
        if isinstance(element.tag, str):
            assert element.tag.rpartition("}")[2] not in ("script", "a", "foreignObject", "image_")
            assert not [name for name in element.attrib if name.startswith("on")]
    return ["".join(element.itertext()) for element in root.iter(f"{SVG}text")]


@pytest.mark.parametrize("name", HOSTILE)
def test_a_card(settings, record_id, unit_row, unit_scores, curves, behaviour, corners, name):
    row = unit_row | {"region": name, "animal": name}
    found = texts(draw_card(row, unit_scores, curves, behaviour, corners, settings), record_id, name)
    assert any(text.count(name) == 2 for text in found)


@pytest.mark.parametrize("name", HOSTILE)
def test_a_card_of_a_unit_that_failed(settings, record_id, unit_row, unit_scores, behaviour, corners, name):
    row = unit_row | {"status": "failed", "status_reason": name}
    found = texts(draw_card(row, unit_scores.iloc[:0], {}, behaviour, corners, settings), record_id)
    assert any(name in text for text in found)


@pytest.mark.parametrize("name", HOSTILE)
def test_a_session_that_failed(settings, record_id, inventory, name):
    finding = {"level": "fail", "place": name, "found": name, "expected": name, "remedy": name}
    inventory |= {"verdict": "fail", "findings": [finding], "file": {"name": name}}
    inventory["subject"] = {"subject_id": name, "species": name}
    found = texts(draw_session_quality(inventory, None, None, None, None, settings), record_id)
    assert any(text.count(name) == 3 for text in found)
    assert any(text.startswith(f"intake, fail: {name}") for text in found)


@pytest.mark.parametrize("name", HOSTILE)
def test_the_names_of_animals(settings, record_id, population, name):
    *_, shares, _ = population(["heather", name])
    found = texts(draw_composition(shares, settings), record_id)
    assert name in found and "heather" in found
