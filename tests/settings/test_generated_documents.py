"""What is generated from the settings: the configuration, the schemas, the README's table.

The schemas are checked by jsonschema, an independent implementation of JSON Schema draft 2020-12.
"""

from __future__ import annotations

from pathlib import Path

import pytest
import yaml
from hypothesis import given, settings, strategies
from jsonschema import Draft202012Validator

from odograph.errors import SettingsError
from odograph.settings.all import STAGES, Settings
from odograph.settings.document import (
    MATTERS,
    TABLE_BEGIN,
    TABLE_END,
    config_text,
    generated_files,
    main,
    sessions_schema,
    settings_schema,
    with_table,
)
from odograph.settings.fields import setting_facts
from odograph.settings.load import load_settings
from odograph.settings.sessions import read_sessions

ROOT = Path(__file__).parents[2]
SCHEMA = Draft202012Validator(settings_schema())
FACTS = {facts.path: facts for facts in setting_facts()}


def schema_accepts(config) -> bool:
    return SCHEMA.is_valid(config)


def loader_accepts(config) -> bool:
    try:
        load_settings(config)
    except SettingsError:
        return False
    return True


@pytest.mark.parametrize("name", sorted(generated_files(ROOT)))
def test_generated_files_are_current(name):
    assert (ROOT / name).read_text(encoding="utf-8") == generated_files(ROOT)[name], "run: make documents"


def test_the_default_configuration_names_every_setting_once_and_gives_the_defaults():
    text = config_text(Settings())
    assert load_settings(yaml.safe_load(text)) == Settings()
    named = [f"{stage}.{key}" for stage, content in yaml.safe_load(text).items() for key in content]
    assert named == list(FACTS)


def test_every_setting_is_explained_above_its_line():
    paragraphs = config_text(Settings()).split("\n\n")
    for facts in FACTS.values():
        (paragraph,) = [text for text in paragraphs if f"\n  {facts.key}:" in text and _told(facts, text)]
        assert paragraph.startswith("  # ")


def _told(facts, paragraph: str) -> bool:
    words = " ".join(line.strip().removeprefix("#").strip() for line in paragraph.splitlines())
    return facts.description in words


def test_values_that_were_set_survive_generation():
    config = {"study": {"name": "heath: 2026"}, "intake": {"unit_filter": [{"column": "q", "at_least": 0.5}]}}
    own = load_settings(config)
    assert load_settings(yaml.safe_load(config_text(own))) == own


def test_every_setting_has_a_description_of_one_sentence_and_a_default():
    for facts in FACTS.values():
        assert facts.description.endswith(".")
        assert "\n" not in facts.description
        assert facts.expected


def test_the_unit_in_a_name_is_the_unit_that_is_said():
    # Common practice, no source: the ending of a key is the unit of its value.
    endings = {"_s": "s", "_ms": "ms", "_m": "m", "_ppm": "ppm", "_cm_s": "cm/s", "_m_s": "m/s", "_pt": "pt"}
    for facts in FACTS.values():
        ending = next((e for e in sorted(endings, key=len, reverse=True) if facts.key.endswith(e)), None)
        if ending and not facts.key.endswith("_matched_share"):
            assert facts.unit == endings[ending], facts.path


def test_the_schemas_are_valid_json_schema():
    Draft202012Validator.check_schema(settings_schema())
    Draft202012Validator.check_schema(sessions_schema())


def test_schema_and_loader_agree_on_the_shipped_configuration():
    config = yaml.safe_load((ROOT / "config/config.yaml").read_text(encoding="utf-8"))
    assert schema_accepts(config)
    assert loader_accepts(config)


@pytest.mark.parametrize("stage", STAGES)
def test_schema_and_loader_both_refuse_an_unknown_key(stage):
    assert not schema_accepts({stage: {"not_a_setting": 1}})
    assert not loader_accepts({stage: {"not_a_setting": 1}})
    assert not schema_accepts({"not_a_stage": {}})


@settings(max_examples=300, deadline=None)
@given(
    path=strategies.sampled_from(
        sorted(path for path, facts in FACTS.items() if isinstance(facts.default, int | float | str))
    ),
    value=strategies.one_of(
        strategies.integers(-(10**6), 10**6),
        strategies.floats(-1e6, 1e6, allow_nan=False),
        strategies.booleans(),
    ),
)
def test_schema_and_loader_agree_on_any_number(path, value):
    stage, key = path.split(".")
    # What one setting asks of another is beyond a schema: a history may reach no further than the guard.
    beside = {"guard_s": 2.0} if path == "encoding.history_s" else {}
    config = {stage: {key: value, **beside}}
    assert schema_accepts(config) == loader_accepts(config)


def test_the_sessions_schema_and_the_reader_know_the_same_columns(tmp_path):
    validator = Draft202012Validator(sessions_schema())
    row = {"session": "a", "nwb": "a.nwb", "animal": "x", "group": "y"}
    assert validator.is_valid(row)
    assert not validator.is_valid({**row, "session": "a b"})
    assert not validator.is_valid({**row, "colour": "red"})
    assert not validator.is_valid({"session": "a"})
    columns = list(sessions_schema()["properties"])
    path = tmp_path / "sessions.tsv"
    cells = ["a", "a.nwb", *[""] * (len(columns) - 2)]
    path.write_text("\t".join(columns) + "\n" + "\t".join(cells) + "\n", encoding="utf-8")
    assert read_sessions(path)[0].session == "a"


def test_the_shipped_sessions_table_fits_its_schema():
    validator = Draft202012Validator(sessions_schema())
    for row in read_sessions(ROOT / "config/sessions.tsv"):
        assert validator.is_valid(
            {"session": row.session, "nwb": row.nwb, "animal": row.animal, "group": row.group}
        )


def test_the_table_of_the_readme_names_real_settings_and_needs_its_markers():
    assert set(MATTERS) <= set(FACTS)
    made = with_table(f"before\n{TABLE_BEGIN}\nstale words\n{TABLE_END}\nafter\n")
    assert made.startswith("before\n")
    assert made.endswith(f"{TABLE_END}\nafter\n")
    assert "stale words" not in made
    assert all(f"`{path}`" in made for path in MATTERS)
    with pytest.raises(ValueError, match="markers"):
        with_table("no markers here")


def test_the_command_writes_once_and_then_finds_everything_current(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert main(["--check"]) == 1
    assert not list(tmp_path.rglob("*.yaml"))
    assert main([]) == 0
    assert main(["--check"]) == 0
    capsys.readouterr()
    assert main([]) == 0
    assert capsys.readouterr().out == ""
