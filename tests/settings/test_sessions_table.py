"""The sessions table: what is read from it, and what a user reads when it is wrong."""

from __future__ import annotations

import pytest

from odograph.errors import InputError
from odograph.settings.sessions import SessionRow, read_sessions


def table(tmp_path, text: str | bytes):
    path = tmp_path / "sessions.tsv"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def refusal(tmp_path, text: str | bytes) -> InputError:
    path = table(tmp_path, text)
    with pytest.raises(InputError) as caught:
        read_sessions(path)
    assert caught.value.file == str(path)
    assert caught.value.expected
    assert caught.value.remedy
    return caught.value


def test_rows_are_read_and_sorted(tmp_path):
    text = (
        "session\tnwb\tanimal\tgroup\tbehaviour.max_gap_s\n"
        "b\tdata/b.nwb\tharrier\tnorth\t0.5\n"
        "# a note\n"
        "\n"
        "a\tdata/a.nwb\t\t\t\n"
    )
    assert read_sessions(table(tmp_path, text)) == [
        SessionRow("a", "data/a.nwb", None, None, {}, 5),
        SessionRow("b", "data/b.nwb", "harrier", "north", {"behaviour.max_gap_s": "0.5"}, 2),
    ]


def test_the_order_of_lines_and_columns_does_not_matter(tmp_path):
    one = read_sessions(table(tmp_path, "session\tnwb\tgroup\na\ta.nwb\tx\nb\tb.nwb\ty\n"))
    other = read_sessions(table(tmp_path, "group\tnwb\tsession\ny\tb.nwb\tb\nx\ta.nwb\ta\n"))
    key = [(row.session, row.nwb, row.group) for row in one]
    assert key == [(row.session, row.nwb, row.group) for row in other]


@pytest.mark.parametrize(
    "text",
    [
        "\ufeffsession\tnwb\na\ta.nwb\n",
        "session\tnwb\r\na\ta.nwb\r\n",
        " session \tnwb\n a \t a.nwb \n",
        "session\tnwb\na\ta.nwb\t\t\n",
        'session\tnwb\na\t"a.nwb"\n',
        "session\tnwb\na\ta.nwb",
    ],
)
def test_what_spreadsheets_do_to_a_table_is_no_harm(tmp_path, text):
    (row,) = read_sessions(table(tmp_path, text))
    assert (row.session, row.nwb) == ("a", "a.nwb")


def test_a_file_that_is_not_there_is_left_to_the_session(tmp_path):
    assert read_sessions(table(tmp_path, "session\tnwb\na\tnowhere/at_all.nwb\n"))[0].session == "a"


@pytest.mark.parametrize(
    ("text", "place", "words"),
    [
        ("session\tnwb\na\ta.nwb\na\tb.nwb\n", "line 3, column session", "twice (first in line 2)"),
        ("session\tnwb\na\ta.nwb\nA\tb.nwb\n", "line 3, column session", "twice"),
        ("session\tnwb\na\ta.nwb\nb\t./a.nwb\n", "line 3, column nwb", "already that of session a"),
        ("session\tnwb\na b\ta.nwb\n", "line 2, column session", "'a b'"),
        ("session\tnwb\n../a\ta.nwb\n", "line 2, column session", "'../a'"),
        ("session\tnwb\n\ta.nwb\n", "line 2, column session", "no session name"),
        ("session\tnwb\na\t\n", "line 2, column nwb", "has no file"),
        ("session\tnwb\na\ta.nwb\tx\n", "line 2", "3 cells"),
        ("session\tnwb\na\n", "line 2", "1 cells"),
        ("session,nwb\na,a.nwb\n", "line 1", "not separated by tabs"),
        ("session\tanimal\na\tx\n", "line 1", "nwb is missing"),
        ("session\tnwb\tnwb\na\ta.nwb\tb.nwb\n", "line 1", "nwb is there twice"),
        ("session\tnwb\t\na\ta.nwb\tx\n", "line 1", "column 3 has no name"),
        ("session\tnwb\tfigures.dpi\na\ta.nwb\t300\n", "line 1", "'figures.dpi'"),
        ("session\tnwb\n", None, "no sessions"),
        ("", None, "empty"),
        ("\n# only a note\n", None, "empty"),
        ("session\tnwb\na\ta.nwb\n".encode("utf-16"), None, "cannot be read"),
    ],
)
def test_a_wrong_table_names_the_place(tmp_path, text, place, words):
    error = refusal(tmp_path, text)
    assert error.place == place
    assert words in error.found


@pytest.mark.parametrize(
    ("column", "nearest"),
    [("Session", "session"), ("file_nwb", "nwb"), ("behaviour.max_gap", "behaviour.max_gap_s")],
)
def test_a_misspelt_column_gets_the_nearest(tmp_path, column, nearest):
    error = refusal(tmp_path, f"session\tnwb\t{column}\na\ta.nwb\t1\n")
    if nearest == "nwb":
        assert error.remedy
    else:
        assert nearest in error.remedy


def test_a_missing_table_is_told(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_sessions(tmp_path / "sessions.tsv")
