"""Settings lead to the line of the file that sets them: the configuration's or the sessions table's."""

import pytest

from odograph.command.setting_places import with_places

CONFIG = """\
study:
  sessions_table: config/sessions.tsv
encoding:
  folds: 8
behaviour:
  max_gap_s: 0.4
"""
TABLE = "session\tnwb\tbehaviour.max_gap_s\na\ta.nwb\t\n# a remark\nb\tb.nwb\t0.9\n"


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "config").mkdir()
    (tmp_path / "config/config.yaml").write_text(CONFIG)
    (tmp_path / "config/sessions.tsv").write_text(TABLE)
    return tmp_path


def row(setting, value, sessions=None):
    return {"setting": setting, "value": value, "sessions": sessions}


def place(folder, *of):
    (found,) = with_places([row(*of)], folder)
    return found["line"], found["now"]


def test_a_setting_of_the_study(folder):
    assert place(folder, "encoding.folds", 8) == ("config/config.yaml:4", 8)
    assert place(folder, "behaviour.max_gap_s", 0.4, ["a"]) == ("config/config.yaml:6", 0.4)


def test_a_setting_of_one_session_is_in_the_sessions_table(folder):
    assert place(folder, "behaviour.max_gap_s", 0.9, ["b"]) == ("config/sessions.tsv:4", 0.9)


def test_what_it_says_now_is_what_holds_for_the_session(folder):
    assert place(folder, "behaviour.max_gap_s", 0.7, ["b"]) == ("config/sessions.tsv:4", 0.9)
    assert place(folder, "behaviour.max_gap_s", 0.7, ["a"]) == ("config/config.yaml:6", 0.4)


def test_sessions_that_agree_name_both_places(folder):
    (folder / "config/sessions.tsv").write_text(TABLE.replace("0.9", "0.4"))
    found = place(folder, "behaviour.max_gap_s", 0.4, ["a", "b"])
    assert found == ("config/config.yaml:6, config/sessions.tsv:4", 0.4)


def test_defaults_and_settings_that_are_written_nowhere(folder):
    (found,) = with_places([row("encoding.guard_s", 0.5)], folder)
    assert found["line"] is None and found["default"] == 0.5 and found["now"] == 0.5


def test_a_study_without_its_files_is_still_told(tmp_path):
    assert place(tmp_path, "encoding.folds", 8) == (None, 8)


def test_a_cell_that_is_not_allowed_hides_no_other_place(folder):
    (folder / "config/sessions.tsv").write_text(TABLE.replace("a.nwb\t", "a.nwb\tlong"))
    assert place(folder, "behaviour.max_gap_s", 0.4, ["a"]) == ("config/sessions.tsv:2", 0.4)
    assert place(folder, "behaviour.max_gap_s", 0.7, ["b"]) == ("config/sessions.tsv:4", 0.9)


def test_without_the_sessions_table_nothing_is_claimed_of_a_session(folder):
    (folder / "config/sessions.tsv").unlink()
    assert place(folder, "behaviour.max_gap_s", 0.9, ["b"]) == (None, 0.9)
    assert place(folder, "encoding.folds", 8) == ("config/config.yaml:4", 8)


def test_the_table_is_named_as_it_is_configured(folder):
    (folder / "config/config.yaml").write_text(CONFIG.replace("config/sessions.tsv", "tables/all.tsv"))
    (folder / "tables").mkdir()
    (folder / "config/sessions.tsv").rename(folder / "tables/all.tsv")
    assert place(folder, "behaviour.max_gap_s", 0.9, ["b"]) == ("tables/all.tsv:4", 0.9)
