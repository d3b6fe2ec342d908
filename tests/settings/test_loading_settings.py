"""The configuration: what is accepted, and what a user reads when it is not."""

from __future__ import annotations

import json

import pytest
import yaml

from odograph.errors import SettingsError
from odograph.settings.all import SESSION_STAGES, STAGES, Settings
from odograph.settings.fields import setting_facts
from odograph.settings.load import (
    changed_from_default,
    load_settings,
    resolve_session,
    settings_table,
)


def refusal(tmp_path, text: str) -> SettingsError:
    path = tmp_path / "config.yaml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(SettingsError) as caught:
        load_settings(path)
    assert caught.value.file == str(path)
    return caught.value


def pasted(error: SettingsError) -> dict:
    """The lines of the remedy that are to be pasted, read as YAML."""
    return yaml.safe_load(error.remedy.split("\n", 1)[1])


@pytest.mark.parametrize("config", [{}, {stage: None for stage in STAGES}, {"behaviour": {}}])
def test_what_is_not_said_takes_the_defaults(config):
    assert load_settings(config) == Settings()


def test_an_empty_file_takes_the_defaults(tmp_path):
    path = tmp_path / "config.yaml"
    path.write_text("# nothing yet\n", encoding="utf-8")
    assert load_settings(path) == Settings()


def test_the_same_settings_from_a_file_and_from_what_the_engine_parsed(tmp_path):
    config = {"behaviour": {"max_gap_s": 0.7}, "study": {"name": "two words"}}
    path = tmp_path / "config.yaml"
    path.write_text(json.dumps(config), encoding="utf-8")
    assert load_settings(path) == load_settings(config) == load_settings(config, file=path)


def test_a_misspelt_setting_gets_the_nearest_and_a_line_that_works(tmp_path):
    error = refusal(tmp_path, "behaviour:\n  bin_s: 0.02\n  max_gaps: 0.4\n")
    assert error.place == "line 3, behaviour.max_gaps"
    assert pasted(error) == {"behaviour": {"max_gap_s": 0.4}}
    assert load_settings(pasted(error)).behaviour.max_gap_s == 0.4


def test_a_setting_in_the_wrong_section_is_sent_to_its_own(tmp_path):
    error = refusal(tmp_path, "encoding:\n  max_gap_s: 0.4\n")
    assert pasted(error) == {"behaviour": {"max_gap_s": 0.4}}


def test_a_setting_outside_all_sections_is_sent_to_its_own(tmp_path):
    error = refusal(tmp_path, "max_gap_s: 0.4\n")
    assert error.place == "line 1, max_gap_s"
    assert pasted(error) == {"behaviour": {"max_gap_s": 0.4}}


def test_a_misspelt_section_gets_the_nearest(tmp_path):
    error = refusal(tmp_path, "behavior:\n  max_gap_s: 0.4\n")
    assert "behaviour" in error.remedy
    assert error.expected.endswith(", ".join(STAGES))


def test_a_word_like_no_setting_lists_those_there_are(tmp_path):
    error = refusal(tmp_path, "sync:\n  zzzz: 1\n")
    assert "max_drift_ppm" in error.expected
    assert error.remedy


def _numbers_with_bounds():
    schema = Settings.model_json_schema()
    signs = {"minimum": -1.0, "exclusiveMinimum": 0.0, "maximum": 1.0, "exclusiveMaximum": 0.0}
    for stage in STAGES:
        model = schema["$defs"][schema["properties"][stage]["$ref"].rpartition("/")[2]]
        for key, entry in model["properties"].items():
            for option in entry.get("anyOf", [entry]):
                for bound, step in signs.items():
                    if bound in option:
                        yield stage, key, option[bound] + step


@pytest.mark.parametrize(("stage", "key", "value"), list(_numbers_with_bounds()))
def test_every_bound_is_kept_and_the_answer_can_be_pasted(tmp_path, stage, key, value):
    error = refusal(tmp_path, yaml.safe_dump({stage: {key: value}}))
    assert error.place == f"line 2, {stage}.{key}"
    assert str(value).removesuffix(".0") in error.found
    assert pasted(error) == {
        stage: {key: next(f.default for f in setting_facts() if f.path == f"{stage}.{key}")}
    }


@pytest.mark.parametrize("text", ["yes", ".nan", ".inf", "wide", "[1]", "null"])
def test_what_is_not_a_number_is_no_number(tmp_path, text):
    error = refusal(tmp_path, f"behaviour:\n  max_speed_m_s: {text}\n")
    assert error.expected == "a number > 0 (unit m/s)"


def test_a_choice_gets_the_nearest(tmp_path):
    error = refusal(tmp_path, "study:\n  on_bad_session: leave-out\n")
    assert pasted(error) == {"study": {"on_bad_session": "leave_out"}}


def test_a_number_for_a_text_is_put_between_quotation_marks(tmp_path):
    error = refusal(tmp_path, "study:\n  name: 2026\n")
    assert pasted(error) == {"study": {"name": "2026"}}


def test_a_fault_inside_a_list_names_its_place(tmp_path):
    text = "encoding:\n  terms:\n    - {name: position, kind: plan, columns: [x_m, y_m]}\n"
    error = refusal(tmp_path, text)
    assert error.place == "line 3, encoding.terms.0.kind"
    assert error.remedy.endswith("kind: plane")


def test_a_misspelt_key_inside_a_list_gets_the_nearest(tmp_path):
    text = "encoding:\n  terms:\n    - {name: speed, kind: line, columns: [speed_cm_s], cell: 30}\n"
    error = refusal(tmp_path, text)
    assert pasted(error) == {"cells": 30}


def test_settings_that_contradict_each_other_are_told_in_words(tmp_path):
    error = refusal(tmp_path, "intake:\n  length_unit: pixels\n")
    assert "metres_per_pixel" in error.found


def test_several_faults_are_told_at_once(tmp_path):
    error = refusal(tmp_path, "behaviour:\n  max_gap_s: -1\n  max_gaps: 1\nsync:\n  max_bend_ms: 0\n")
    for place in ("line 2, behaviour.max_gap_s", "line 3, behaviour.max_gaps", "line 5, sync.max_bend_ms"):
        assert place in str(error)


def test_a_key_given_twice_is_refused(tmp_path):
    error = refusal(tmp_path, "sync:\n  max_bend_ms: 3\n  max_bend_ms: 4\n")
    assert error.place == "line 3, sync.max_bend_ms"


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("sync:\n  max_bend_ms 3\n  max_drift_ppm: 4\n", "not valid YAML"),
        ("- sync\n", "at the top"),
        ("sync: 3\n", "where a section belongs"),
    ],
)
def test_what_is_no_configuration_is_told_as_such(tmp_path, text, words):
    assert words in refusal(tmp_path, text).found


def test_a_missing_file_is_told(tmp_path):
    with pytest.raises(SettingsError, match="no such file"):
        load_settings(tmp_path / "config.yaml")


def test_a_fault_from_the_command_line_has_no_line(tmp_path):
    path = tmp_path / "config.yaml"
    path.write_text("behaviour:\n  bin_s: 0.02\n", encoding="utf-8")
    with pytest.raises(SettingsError) as caught:
        load_settings({"behaviour": {"bin_s": 0.02, "max_gaps": 1}}, file=path)
    assert "behaviour.max_gaps" in caught.value.place


def test_only_what_was_changed_counts_as_changed():
    settings = load_settings({"behaviour": {"max_gap_s": 0.7, "bin_s": 0.02}})
    changed = changed_from_default(settings)
    assert list(changed) == ["behaviour.max_gap_s"]
    assert changed["behaviour.max_gap_s"]["value"] == 0.7
    assert changed["behaviour.max_gap_s"]["default"] == Settings().behaviour.max_gap_s
    assert changed_from_default(Settings()) == {}
    assert [row["path"] for row in settings_table(settings) if row["changed"]] == ["behaviour.max_gap_s"]


def test_a_session_takes_its_own_settings_and_leaves_the_study_alone():
    study = load_settings({"behaviour": {"bin_s": 0.04}})
    own = resolve_session(study, {"behaviour.max_gap_s": "0.7", "intake.back_point": " "})
    assert own.behaviour.max_gap_s == 0.7
    assert own.behaviour.bin_s == 0.04
    assert own.intake.back_point is None
    assert study.behaviour.max_gap_s == Settings().behaviour.max_gap_s
    assert resolve_session(study, {}) == study


@pytest.mark.parametrize(
    ("column", "text", "value"),
    [
        ("intake.frame_pulses_place", "null", None),
        ("intake.region_column", "007", "007"),
        ("intake.front_point", "no", "no"),
        ("intake.direction_clockwise", "true", True),
        ("encoding.folds", "5", 5),
        ("behaviour.max_gap_s", "1e-1", 0.1),
    ],
)
def test_a_cell_is_read_as_the_setting_means_it(column, text, value):
    study = load_settings({"intake": {"frame_pulses_place": "acquisition/pulses"}})
    stage, key = column.split(".")
    assert getattr(getattr(resolve_session(study, {column: text}), stage), key) == value


def test_a_cell_may_hold_a_list():
    own = resolve_session(Settings(), {"intake.unit_filter": "[{column: label, keep: [good]}]"})
    assert own.intake.unit_filter[0].column == "label"


def test_columns_that_need_each_other_may_come_in_any_order():
    overrides = {"intake.length_unit": "pixels", "intake.metres_per_pixel": "0.002"}
    for order in (sorted(overrides), sorted(overrides, reverse=True)):
        own = resolve_session(Settings(), {column: overrides[column] for column in order})
        assert own.intake.metres_per_pixel == 0.002


@pytest.mark.parametrize(
    ("overrides", "words"),
    [
        ({"behaviour.max_gap_s": "-1"}, "the value -1"),
        ({"behaviour.max_gap_s": "yes"}, "the value yes"),
        ({"behaviour.max_gap_s": "[1"}, "the value"),
        ({"figures.dpi": "300"}, "cannot be set for one session"),
        ({"behaviour.nothing": "300"}, "cannot be set for one session"),
        ({"intake.length_unit": "pixels"}, "metres_per_pixel"),
    ],
)
def test_a_wrong_cell_names_the_session(overrides, words):
    with pytest.raises(SettingsError) as caught:
        resolve_session(Settings(), overrides, session="morning", file="sessions.tsv")
    assert words in caught.value.found
    assert "morning" in caught.value.place
    assert caught.value.file == "sessions.tsv"


def test_settings_that_judge_all_units_alike_are_not_for_one_session():
    assert {facts.path.split(".")[0] for facts in setting_facts() if facts.per_session} == set(SESSION_STAGES)
