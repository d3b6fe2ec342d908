"""Names on the page are text, whatever they hold: the page has the same elements for any of them."""

from __future__ import annotations

import dataclasses
from html.parser import HTMLParser

import pytest

from odograph.report.page import build_page

HOSTILE = (
    "<script>alert(1)</script>",
    "\"><img src=x onerror='alert(1)'>",
    "'><svg/onload=alert(1)>",
    "</title></style></script><script>",
    "<!-- x --><![CDATA[",
    "&lt;b&gt; &amp; &#60;",
    "javascript:alert(1)",
    "{{ 7*7 }} {% raw %}",
)


class Elements(HTMLParser):
    """The elements with the names of their attributes, and all the text."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.found, self.text, self.values = [], "", []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.found.append((tag, *(name for name, _ in attrs)))
        self.values += [value for name, value in attrs if name in ("href", "src")]

    def handle_data(self, data):
        self.text += data

    def handle_comment(self, data):
        self.found.append(("comment", data))


def page_named(make_context, name):
    """A page on which everything that users and files name has this name."""
    context = make_context()
    units = context.units.assign(animal=name, region=name, group=name)
    units["status_reason"] = units["status_reason"].where(units["status_reason"].isna(), name)
    verdicts = context.verdicts.assign(animal=name, group=name, reason=name)
    finding = {"level": "warn", "place": name, "found": name, "expected": name, "remedy": name}
    documents = {
        "intake": {"heron_01": {"verdict": "warn", "findings": [finding], "file": {"name": name}}},
        "sync": {},
        "behaviour": {},
    }
    changed = [row | {"value": name, "changed": True} for row in context.settings[:1]]
    rest = [
        row | {"value": [{"column": name, "keep": [name]}], "changed": True}
        if row["path"] == "intake.unit_filter"
        else row
        for row in context.settings[1:]
    ]
    return build_page(
        dataclasses.replace(
            context,
            study=name,
            summary_lines=[name],
            units=units,
            verdicts=verdicts,
            documents=documents,
            settings=[*changed, *rest],
            session_settings={"heron_01": {"intake.units_place": name}},
            software={"numpy": name},
            fit_line=name,
        )
    )


@pytest.fixture
def plain(make_context):
    return Elements(page_named(make_context, "heather"))


@pytest.mark.parametrize("name", HOSTILE)
def test_any_name_is_text(make_context, plain, name):
    page = Elements(page_named(make_context, name))
    assert page.found == plain.found
    assert page.text.count(name) == plain.text.count("heather") > 20
    assert not [value for value in page.values if value.startswith("javascript:")]


def test_a_session_of_any_name_stays_within_its_attribute(make_context):
    """Sessions have plain names by the rules of the table; should one ever get through, it breaks nothing."""

    def page(name):
        context = make_context()
        units = context.units.assign(session=name)
        verdicts = context.verdicts.assign(session=[name, "ibis_02"])
        return Elements(build_page(make_context(units=units, verdicts=verdicts, miniatures={})))

    for name in HOSTILE:
        assert page(name).found == page("heather_01").found
