"""The page is whole, well formed, self-contained and readable by everyone."""

from __future__ import annotations

import dataclasses
import itertools
import re
from html.parser import HTMLParser
from importlib import resources

import pandas as pd
import pytest

from odograph.figures.captions import CAPTIONS
from odograph.report.page import build_page
from odograph.settings.all import Settings

VOID = {"meta", "br", "img", "input", "link", "image", "line", "polygon", "polyline"}
SECTIONS = ["found", "checks", "sessions", "population", "units", "settings", "methods", "trace", "cautions"]


class Page(HTMLParser):
    """Elements in their order, with attributes and the text below them; complains of what is not closed."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[dict] = []
        self.elements: list[dict] = []
        self.feed(text)
        self.close()
        assert self.open == [], f"not closed: {[element['tag'] for element in self.open]}"

    def handle_starttag(self, tag, attrs):
        element = {"tag": tag, "text": "", "above": [e["tag"] for e in self.open], **dict(attrs)}
        self.elements.append(element)
        if tag not in VOID:
            self.open.append(element)

    def handle_startendtag(self, tag, attrs):
        self.elements.append({"tag": tag, "text": "", "above": [e["tag"] for e in self.open], **dict(attrs)})

    def handle_endtag(self, tag):
        assert self.open and self.open[-1]["tag"] == tag, f"</{tag}> closes nothing"
        self.open.pop()

    def handle_data(self, data):
        for element in self.open:
            element["text"] += data

    def all(self, tag: str, **wanted) -> list[dict]:
        return [e for e in self.elements if e["tag"] == tag and all(e.get(k) == v for k, v in wanted.items())]

    def one(self, tag: str, **wanted) -> dict:
        (element,) = self.all(tag, **wanted)
        return element


def test_sections_in_their_order(make_context):
    page = Page(build_page(make_context()))
    assert [e["id"] for e in page.all("section")] == SECTIONS
    assert [e["href"] for e in page.all("a") if "nav" in e["above"]] == [f"#{name}" for name in SECTIONS]
    assert page.one("html")["lang"] == "en"
    assert page.one("h1")["text"] == "Marsh birds & friends"
    assert page.one("meta", name="odograph-record")["content"] == "record:" + "cd" * 32


def test_headings_descend_one_level_at_a_time(make_context):
    levels = [
        int(e["tag"][1])
        for e in Page(build_page(make_context())).elements
        if re.fullmatch(r"h[1-6]", e["tag"])
    ]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(after - before <= 1 for before, after in itertools.pairwise(levels))


def test_nothing_is_fetched(make_context):
    text = build_page(make_context())
    page = Page(text)
    for element in page.elements:
        for name in ("src", "href", "xlink:href", "action", "srcset"):
            target = element.get(name) or ""
            assert not re.match(r"(?i)\s*(https?:|//|ftp:|file:)", target), target
    style = "".join(e["text"] for e in page.all("style"))
    assert "url(" not in style
    assert "@import" not in style
    script = "".join(e["text"] for e in page.all("script"))
    assert not re.search(r"fetch\(|XMLHttpRequest|import\s|https?:", script)
    assert not page.all("link")


def test_everyone_can_read_it(make_context):
    page = Page(build_page(make_context()))
    assert all(e.get("alt") for e in page.all("img"))
    assert all(e.get("scope") in ("col", "row") for e in page.all("th"))
    assert len(page.all("caption")) == len(page.all("table"))
    assert all(e.get("aria-label") for e in page.all("svg"))
    identifiers = [e["id"] for e in page.elements if "id" in e]
    assert len(identifiers) == len(set(identifiers))
    anchors = {e["href"][1:] for e in page.all("a") if e["href"].startswith("#")}
    assert anchors <= set(identifiers)


def luminance(colour: str) -> float:
    """Relative luminance (W3C Web Content Accessibility Guidelines 2.1)."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    red, green, blue = (p / 12.92 if p <= 0.04045 else ((p + 0.055) / 1.055) ** 2.4 for p in parts)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize(
    "name", ["ink", "soft", "link", "pass", "warn", "fail", "position", "head_direction", "speed"]
)
def test_contrast_of_light_and_dark(scheme, name):
    # W3C Web Content Accessibility Guidelines 2.1, 1.4.3: 4.5:1 for text; 1.4.11: 3:1 for graphics.
    style = resources.files("odograph.report").joinpath("page.css").read_text(encoding="utf-8")
    blocks = re.findall(r":root \{(.*?)\}", style, re.DOTALL)
    colours = dict(re.findall(r"--([\w]+): (#[0-9a-f]{6})", blocks[0 if scheme == "light" else 1]))
    light, dark = sorted((luminance(colours[name]), luminance(colours["paper"])), reverse=True)
    assert (light + 0.05) / (dark + 0.05) >= (3.0 if name in ("position", "head_direction", "speed") else 4.5)


def test_failures_come_first_with_what_to_do(make_context):
    checks = Page(build_page(make_context())).one("section", id="checks")["text"]
    assert checks.index("the file ends too early") < checks.index("20 pulses have no frame")
    assert checks.index("20 pulses have no frame") < checks.index("3 swaps were repaired")
    assert "copy it again" in checks
    assert "heron_01, unit 6" in checks


def test_every_session_has_a_row(make_context):
    page = Page(build_page(make_context()))
    sessions = page.one("section", id="sessions")["text"]
    assert "1 of 2 sessions were used" in sessions
    for part in ("intake: the file ends too early", "−31.50", "10.0 min (95.0 %)", "7 of 8", "heron_01.nwb"):
        assert part in sessions
    assert page.all("a", href="sessions/ibis_02/session_quality.png")


def test_a_session_without_a_reason_gives_none(make_context):
    """As read back from its file, where what is missing is NaN."""
    verdicts = make_context().verdicts
    verdicts.loc[0, ["stage", "reason"]] = float("nan")
    (row,) = [
        e["text"]
        for e in Page(build_page(make_context(verdicts=verdicts))).all("tr")
        if e["text"].startswith("heron_01warn")
    ]
    assert row.startswith("heron_01warn–heron")


def test_every_unit_has_a_row_and_a_card(make_context):
    page = Page(build_page(make_context(n_units=8)))
    rows = [e for e in page.all("tr") if e.get("data-session")]
    assert [e["data-encodes"] for e in rows[:4]] == [
        "position",
        "position head_direction",
        "",
        "head_direction",
    ]
    assert rows[6]["data-status"] == "too_few_spikes"
    assert "too few spikes" in rows[6]["text"]
    assert "non-monotonic" in rows[1]["text"]
    cards = [e["href"] for e in page.all("a") if "cards" in e["href"]]
    assert cards == [f"sessions/heron_01/cards/unit-{k}.png" for k in range(8)]


def test_figures_carry_caption_table_and_record(make_context):
    page = Page(build_page(make_context()))
    captions = [e["text"] for e in page.all("figcaption")]
    assert len(captions) == len(CAPTIONS)
    for told, caption in zip(captions, CAPTIONS.values(), strict=True):
        assert caption.text in told
        assert caption.table in told
        assert "record abababababab" in told


def test_changed_settings_come_before_all_settings(make_context):
    settings = Settings.model_validate({"behaviour": {"max_gap_s": 0.9}, "study": {"name": "x"}})
    text = Page(build_page(make_context(settings=settings))).one("section", id="settings")["text"]
    first, _, rest = text.partition("All settings")
    assert "behaviour.max_gap_s0.90.3s" in first
    assert "behaviour.max_gap_s0.75" in first, "the setting of a single session"
    assert "encoding.folds" not in first
    assert all(row["path"] in rest for row in make_context().settings)


def test_nothing_to_show_is_said(make_context):
    context = make_context()
    empty = dataclasses.replace(context, units=context.units.iloc[:0], miniatures={}, figures=[])
    page = Page(build_page(empty))
    assert "No session that was used holds units." in page.one("section", id="units")["text"]
    assert "No figures were drawn." in page.one("section", id="population")["text"]
    assert "Every setting has its default." in page.one("section", id="settings")["text"]


def test_text_from_files_cannot_become_markup(make_context):
    context = make_context(study="<script>alert(1)</script>")
    context.units.loc[0, "region"] = '"><img src=x>'
    context.documents["sync"]["heron_01"]["findings"][0]["found"] = "<b>bold</b> & more"
    page = Page(build_page(context))
    assert len(page.all("script")) == 1
    assert not page.all("img", src="x")
    assert "<b>bold</b> & more" in page.one("section", id="checks")["text"]
    assert page.one("h1")["text"] == "<script>alert(1)</script>"


def test_page_of_170_units_stays_small(make_context):
    assert len(build_page(make_context(n_units=170)).encode()) < 3_000_000


def test_order_of_units_and_sessions_does_not_matter(make_context):
    context = make_context()
    documents = {
        stage: dict(reversed(list(by_session.items())))
        for stage, by_session in reversed(list(context.documents.items()))
    }
    mixed = dataclasses.replace(
        context,
        units=context.units.iloc[::-1],
        documents=documents,
        miniatures=dict(reversed(list(context.miniatures.items()))),
    )
    assert build_page(context) == build_page(mixed)


def test_trace_names_a_command_for_a_figure(make_context):
    text = Page(build_page(make_context())).one("section", id="trace")["text"]
    assert "odograph trace results/figures/composition.png" in text
    assert "odograph trace abababababab" in text


def test_missing_values_are_dashes(make_context):
    context = make_context()
    context.units.loc[0, ["mean_rate_hz", "selected_bits_per_spike"]] = pd.NA
    text = build_page(context)
    assert "nan" not in Page(text).one("section", id="units")["text"].lower()
    assert "<NA>" not in text


def speed_rows() -> pd.DataFrame:
    """A speed table: one variable's gains of all units and of a region, beside the matched halves."""
    rows = []
    for level, name, n in (("all", "all", 40), ("animal", "heron", 25), ("region", "MEC <left>", 0)):
        head = {"level": level, "name": name, "n": n, "animals": 3, "sessions": 5}
        values = {
            "mean gain": (7, 0.123, 0.05, 0.21),
            "median gain": (7, 0.07, 0.01, 0.11),
            "sharpens": (12, 0.3, 0.15, 0.45),
            "blunts": (0, 0.0, float("nan"), float("nan")),
            "failed": (3, 0.07, 0.02, 0.19),
            "fitted information, fast minus slow": (30, 0.25, 0.2, 0.31),
            "fitted information rate, fast minus slow": (30, 1.5, 1.25, 1.75),
        }
        for category, (k, value, low, high) in values.items():
            rows.append(head | {"measure": "head_direction_speed_gain", "category": category, "k": k})
            rows[-1] |= {"value": value, "low": low, "high": high}
        rows.append(head | {"measure": "head_direction_information_change", "category": "fast minus slow"})
        rows[-1] |= {"k": 22, "value": 0.09, "low": -0.04, "high": 0.17}
    return pd.DataFrame(rows)


def test_speed_gains_stand_beside_the_matched_halves(make_context):
    page = Page(build_page(make_context(speed=speed_rows())))
    (caption,) = [e for e in page.all("caption") if e["text"] == "Does tuning sharpen with running speed"]
    assert caption["above"][-1] == "table"
    whole, region = [e["text"] for e in page.all("tr") if e["text"].startswith("head direction")]
    for part in (
        "all403 animals, 5 sessions",
        "0.120.05 to 0.21",
        "12 of 40: 30 %15 to 45 %",
        "0 of 40: 0 %",
        "3 of 40: 7 %2 to 19 %",
        "0.250.20 to 0.31",
        "1.501.25 to 1.75",
        "0.09−0.04 to 0.17",
    ):
        assert part in whole
    assert "region: MEC <left>" in region and "12 of 0" in region
    assert page.all("a", href="population/speed.tsv")


def test_the_fit_is_told_in_a_line(make_context):
    line = "Goodness of fit on held-out time: 30 of 40 units & so on."
    assert line in Page(build_page(make_context(fit_line=line))).one("section", id="population")["text"]


@pytest.mark.parametrize(
    "speed", [None, speed_rows().iloc[:0], speed_rows().query("category == 'fast minus slow'")]
)
def test_results_without_gains_have_no_table_of_them(speed, make_context):
    assert "sharpen with running speed</caption>" not in build_page(make_context(speed=speed))
