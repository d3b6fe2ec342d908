"""What an archive's copies leave out, and that nothing else changes in them."""

from pathlib import Path

from odograph.provenance.archive.private import archived_record, archived_sessions, files_that_name


def test_only_the_host_is_left_out_of_a_record():
    run = {"started": "2026-01-01T00:00:00.000+00:00", "host": "heath", "seconds": 1.5}
    record = {"record_id": "record:1", "run": run}
    assert archived_record(record) == {
        "record_id": "record:1",
        "run": {"started": run["started"], "seconds": 1.5},
    }
    assert record["run"]["host"] == "heath"


def test_a_sessions_table_that_says_the_places_already_stays_as_it_is():
    text = "# one line\r\nsession\tnwb\r\n\r\nalpha\trecordings/a.nwb\r\n"
    assert archived_sessions(text, {"alpha": "recordings/a.nwb"}) == text


def test_places_elsewhere_are_replaced_and_the_rest_of_the_table_stays():
    text = "# made by hand\n\nanimal\tnwb\tsession\n A\t/somebody/a.nwb\talpha\nB\trecordings/b.nwb\tbeta\n"
    places = {"alpha": "recordings/a.nwb", "beta": "recordings/b.nwb"}
    expected = (
        "# made by hand\n\nanimal\tnwb\tsession\n A\trecordings/a.nwb\talpha\nB\trecordings/b.nwb\tbeta\n"
    )
    assert archived_sessions(text, places) == expected


def test_a_users_file_that_names_a_place_of_this_machine_is_told():
    texts = {
        "config/config.yaml": "# see /disk/sam/notes\n",
        "METHODS.md": "/disk/sammy/x and results/disk/sam\n",
    }
    assert files_that_name(texts, [Path("/disk/sam"), Path("/")]) == [("config/config.yaml", "/disk/sam")]
