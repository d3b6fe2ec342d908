"""Studies of more units than one page shows: a page of units for each session, led to by the report."""

import re
from html.parser import HTMLParser

import pandas as pd
import pytest

from odograph.figures.miniature import draw_miniature
from odograph.report.page import build_page, build_units_page
from odograph.settings.figures import FiguresSettings


class Links(HTMLParser):
    """The targets of links, and the identifiers of tables."""

    def __init__(self, page):
        super().__init__()
        self.targets, self.tables = [], []
        self.feed(page)

    def handle_starttag(self, tag, attributes):
        found = dict(attributes)
        if tag == "a":
            self.targets.append(found["href"])
        if tag == "table" and "id" in found:
            self.tables.append(found["id"])


@pytest.fixture
def many(make_context):
    """Eight units in each of two sessions, listed apart."""
    first = make_context(8).units
    units = pd.concat([first, first.assign(session="stork_03", animal="stork")], ignore_index=True)
    pages = {session: f"units/{session}.html" for session in ("heron_01", "stork_03")}
    return make_context(8, units=units, miniatures={}, unit_pages=pages)


def test_the_report_leads_to_the_page_of_each_session_and_lists_no_unit(many):
    page = build_page(many)
    links = Links(page)
    assert {"units/heron_01.html", "units/stork_03.html"} <= set(links.targets)
    assert "unit-pages" in links.tables and "unit-table" not in links.tables
    assert not [target for target in links.targets if "/cards/" in target]
    assert "The study has 16 units, more than the 2,000 that one page shows" in page


def test_a_session_s_row_counts_its_units(many):
    row = re.search(r'<tr><th scope="row"><a href="units/stork_03.html">.*?</tr>', build_page(many))[0]
    units = many.units[many.units["session"] == "stork_03"]
    several = int(units["encoded"].fillna("").str.contains("+", regex=False).sum())
    some = int((units["encoded"].fillna("constant") != "constant").sum())
    assert re.findall(r'data-v="(\d+)"', row) == ["8", "7", str(some), str(several)]


def test_a_session_s_page_lists_its_units_and_leads_back(many):
    curves = many.units[many.units["session"] == "stork_03"]["unit"]
    maps = {("stork_03", int(unit)): draw_miniature({}, FiguresSettings()) for unit in curves}
    page = build_units_page(many, "stork_03", maps)
    targets = Links(page).targets
    assert "../report.html" in targets
    cards = [target for target in targets if "/cards/" in target]
    assert cards == [f"../sessions/stork_03/cards/unit-{unit}.png" for unit in range(8)]
    assert "heron_01" not in page
    assert page == build_units_page(many, "stork_03", maps)


def test_names_are_escaped_there_too(make_context):
    hostile = '<script>alert("x")</script>'
    context = make_context(3, study=hostile, unit_pages={"heron_01": "units/heron_01.html"})
    for page in (build_page(context), build_units_page(context, "heron_01", {})):
        assert hostile not in page
