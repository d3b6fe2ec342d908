"""The methods say what was done with the settings it was done with."""

from __future__ import annotations

import re

import pytest

from odograph.report.methods import REFERENCES, methods
from odograph.settings.all import Settings


def written(make_context, **sections) -> tuple[str, list[str]]:
    context = make_context(settings=Settings.model_validate(sections))
    paragraphs, references = methods(context.value, {"numpy": "9.8.7"})
    return "\n".join(paragraphs), references


def test_every_setting_it_speaks_of_exists(make_context):
    text, _ = written(make_context)
    assert "None" not in text
    with pytest.raises(KeyError, match="no_such"):
        make_context().value("encoding.no_such")


@pytest.mark.parametrize(
    "section, key, value, words",
    [
        ("behaviour", "max_gap_s", 0.7, "gaps of up to 0.7 s"),
        ("behaviour", "bin_s", 0.05, "bins of 50 ms"),
        ("behaviour", "min_speed_cm_s", 3.0, "Bins slower than 3 cm/s were masked"),
        ("encoding", "folds", 7, "7 folds"),
        ("encoding", "minimum_spikes", 321, "fewer than 321 spikes"),
        ("encoding", "tests", False, "Terms were not tested"),
        ("encoding", "history_s", 0.25, "own spikes of the last 0.25 s, made of 4 raised cosines"),
        ("encoding", "test_draws", 777, "ranked among 777 circular shifts of speed"),
        ("population", "false_discovery_rate", 0.01, "false discovery rate of 0.01"),
        ("population", "confidence", 0.9, "90 % intervals"),
        ("sync", "max_bend_ms", 4.5, "more than 4.5 ms"),
    ],
)
def test_settings_are_told(section, key, value, words, make_context):
    sections = {"intake": {"frame_pulses_place": "acquisition/pulses"}} | {section: {key: value}}
    assert words in written(make_context, **sections)[0]


def test_without_pulses_no_matching_is_claimed(make_context):
    text, _ = written(make_context)
    assert "already" in text
    assert "matching frame pulses" not in text


def test_terms_and_models_are_counted(make_context):
    term = {"name": "heading_rate", "kind": "line", "columns": ["heading_rate"], "basis_size": 9}
    text, _ = written(make_context, encoding={"terms": [term]})
    assert "heading rate by 9 B-splines" in text
    assert "every subset of the terms (1 in all)" in text


def test_a_study_without_speed_has_no_speed_gains(make_context):
    term = {"name": "heading_rate", "kind": "line", "columns": ["heading_rate"], "penalty_order": 1}
    text, _ = written(make_context, encoding={"terms": [term]})
    assert "(1 + g z) f" not in text and "first-derivative for heading rate" in text
    assert "(1 + g z) f" in written(make_context)[0]


def test_speed_gains_are_told_in_full(make_context):
    text, references = written(make_context, encoding={"running_above_cm_s": 2.5})
    for part in (
        "holds position or head direction, with a p of at most 0.05",
        "log(1 + v / 5 cm/s)",
        "above 0 the tuning is deeper and sharper at speed",
        "the 20th and of the 80th percentile of running speed (above 2.5 cm/s)",
        "information per second, which is that times the fitted mean rate",
    ):
        assert part in text
    assert REFERENCES["corrected"] in references


def test_gains_that_were_not_tested_claim_no_test(make_context):
    text, _ = written(make_context, encoding={"tests": False})
    assert "(1 + g z) f" in text and "efficient score" not in text


def test_citations_point_to_references(make_context):
    pulses = {"frame_pulses_place": "acquisition/pulses"}
    text, references = written(make_context, intake=pulses, encoding={"history_s": 0.3})
    cited = {int(n) for group in re.findall(r"\[([\d, ]+)\]", text) for n in group.split(",")}
    assert cited == set(range(1, len(references) + 1))
    assert set(references) == set(REFERENCES.values())
    assert all(re.search(r"\b(19|20)\d\d\b", reference) for reference in references)


def test_first_citations_come_in_order(make_context):
    text, references = written(make_context, encoding={"history_s": 0.3})
    seen = [int(n) for group in re.findall(r"\[([\d, ]+)\]", text) for n in group.split(",")]
    assert list(dict.fromkeys(seen)) == list(range(1, len(references) + 1))
