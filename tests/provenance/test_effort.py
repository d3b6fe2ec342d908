"""How many shards a session gets, that it keeps them, and what its jobs ask a cluster for."""

import json
from pathlib import Path

import pytest

from odograph.provenance.effort import (
    MOST_SHARDS,
    NO_EFFORT,
    Effort,
    SettledShards,
    keep_shards_of,
    megabytes,
    minutes,
    session_effort,
    shards_for,
)
from odograph.settings.all import Settings
from odograph.settings.study import StudySettings


def effort(units=100, bins=90_000, models=7, history=False):
    return Effort(units=units, bins=bins, models=models, history=history)


@pytest.fixture
def study_folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_bins_come_from_the_length_and_the_width_of_a_bin():
    settings = Settings.model_validate({"behaviour": {"bin_s": 0.05}})
    found = session_effort(settings, units=3, duration_s=100.01)
    assert (found.units, found.bins, found.models, found.history) == (3, 2001, 7, False)
    assert session_effort(settings, units=3, duration_s=None).bins == 0


def test_cost_is_linear_in_units_and_grows_with_bins_models_and_history():
    assert effort(units=200).fit_seconds == pytest.approx(2 * effort(units=100).fit_seconds)
    longer = [effort(bins=bins).fit_seconds for bins in (90_000, 180_000, 270_000)]
    assert longer[2] - longer[1] == pytest.approx(longer[1] - longer[0]) and longer[1] > longer[0]
    assert effort(models=15).fit_seconds > effort(models=7).fit_seconds > effort(models=3).fit_seconds
    assert effort(history=True).fit_seconds > effort().fit_seconds


def test_shards_are_as_many_as_the_target_time_asks_for():
    one = effort()
    seconds = one.fit_seconds
    assert shards_for(one, minutes=seconds / 60) == 1
    assert shards_for(one, minutes=seconds / 60 / 2.5) == 3
    assert shards_for(NO_EFFORT, minutes=5) == 1
    assert shards_for(effort(units=10**6), minutes=1) == MOST_SHARDS


def test_most_sessions_are_one_or_two_shards_at_the_default():
    default = StudySettings().shard_minutes
    assert shards_for(effort(units=200, bins=30 * 60 * 50), default) == 1
    assert shards_for(effort(units=300, bins=60 * 60 * 50), default) <= 2


def test_a_session_keeps_its_number_when_units_come(study_folder):
    study = StudySettings(shard_minutes=1.0)
    first = SettledShards()
    number = first.of("a", study, effort(units=100))
    first.keep()
    again = SettledShards()
    assert again.of("a", study, effort(units=10_000)) == number
    assert again.of("b", study, effort(units=10_000)) > number


def test_another_target_settles_anew_and_a_number_asked_for_goes_first(study_folder):
    settled = SettledShards()
    kept = settled.of("a", StudySettings(shard_minutes=1.0), effort(units=300))
    assert settled.of("a", StudySettings(shard_minutes=1.0, shards_per_session=9), effort()) == 9
    assert settled.of("a", StudySettings(shard_minutes=1.0), effort(units=1)) == kept
    assert settled.of("a", StudySettings(shard_minutes=0.5), effort(units=300)) > kept


def test_a_session_out_of_the_table_for_a_while_keeps_its_number(study_folder):
    study = StudySettings(shard_minutes=1.0)
    settled = SettledShards()
    number = settled.of("a", study, effort(units=300))
    settled.keep()
    without = SettledShards()
    without.of("b", study, effort())
    without.keep()
    assert SettledShards().of("a", study, effort(units=1)) == number


@pytest.mark.parametrize(
    "text",
    ["", "{", "[]", "null", '{"a": 3}', '{"a": {"shards": 0, "minutes": 1}}', '{"a": {"shards": "x"}}'],
)
def test_a_damaged_file_is_settled_anew(study_folder, text):
    SettledShards.file.parent.mkdir(parents=True)
    SettledShards.file.write_text(text)
    settled = SettledShards()
    assert settled.of("a", StudySettings(), effort()) == 1
    settled.keep()
    assert json.loads(Path("results/plan/shards.json").read_text())["a"]["shards"] == 1


def test_a_study_run_again_elsewhere_is_divided_as_it_was(study_folder):
    for shard in range(3):
        record = Path(f"results/sessions/a/encoding/shard-{shard}/record.json")
        record.parent.mkdir(parents=True)
        record.write_text("{}")
    keep_shards_of(Path("results"), Path())
    assert SettledShards().of("a", StudySettings(shard_minutes=77.0), effort(units=1)) == 3
    assert SettledShards().of("b", StudySettings(), effort(units=1)) == 1


@pytest.mark.parametrize("step", ["intake", "sync", "behaviour", "encoding", "cards", "population", "root"])
def test_more_work_never_asks_for_less(step):
    for ask in (
        lambda size, units: megabytes(step, size, 100, units),
        lambda size, units: minutes(step, size, 1, units),
    ):
        assert 0 < ask(effort(), 1000) <= ask(effort(units=300, bins=720_000), 100_000)


def test_more_shards_ask_for_less_time_each():
    large = effort(units=2000, bins=720_000)
    assert minutes("encoding", large, 1, 0) > minutes("encoding", large, 4, 0) >= 10
