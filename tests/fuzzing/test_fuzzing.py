"""Damaged recordings and records that once went wrong, and a few new ones at every run.

The seeds lie under `seeds/`: what was found by `fuzz.py`, named after what it is. Readers may read or
refuse them, but never raise anything else than a plain error with all its facts, read on for ever, or take
memory for what is not there.
"""

from __future__ import annotations

import json
import random
from types import SimpleNamespace

import damage
import fuzz
import h5py
import numpy as np
import pytest
import reading
import record_damage
import record_reading
import recording_cases
from base_recordings import POSITION, SEEDS, SETTINGS, base
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from odograph.errors import InputError, OdographError
from odograph.provenance.canonical import canonical_json, readable_json
from odograph.provenance.files import read_json
from odograph.provenance.record_shape import fault_of_record, fault_of_root
from odograph.provenance.records import read_record
from odograph.provenance.survey import Request, survey
from odograph.recording.links import MOST_PATHS, follow_links
from odograph.recording.ragged import read_ragged
from odograph.recording.reader import read_recording
from odograph.settings.intake import IntakeSettings
from odograph.settings.load import load_settings
from odograph.settings.sessions import read_sessions
from odograph.steps.intake import _error_again
from odograph.steps.survey_recordings import survey_recording

RECORDING_SEEDS = json.loads((SEEDS / "recordings.json").read_text(encoding="utf-8"))
RECORD_SEEDS = json.loads((SEEDS / "records.json").read_text(encoding="utf-8"))
QUICKLY = settings(
    max_examples=60,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)


@pytest.mark.parametrize("name", SETTINGS)
def test_the_recordings_that_are_damaged_can_be_read_when_whole(tmp_path, name):
    path = tmp_path / "recording.nwb"
    path.write_bytes(base(name))
    for values in SETTINGS[name]:
        answer = survey_recording("walk", str(path), IntakeSettings(**values))
        assert "error" not in answer and answer["units"] and answer["signals"]["tracking"]


def test_the_study_that_is_damaged_holds_when_whole(tmp_path):
    home = record_damage.write_records({"what": "study", "damages": []}, tmp_path)
    for what in record_damage.FILES:
        assert record_reading.read_case({"what": what, "damages": []}, home) == "read"


@pytest.mark.parametrize("seed", RECORDING_SEEDS, ids=lambda seed: seed["name"])
def test_a_recording_that_once_went_wrong(tmp_path, seed):
    path = reading.write_recording(seed["case"], tmp_path)
    assert reading.read_case(seed["case"], path) == seed["ends"]


@pytest.mark.parametrize("seed", RECORD_SEEDS, ids=lambda seed: seed["name"])
def test_records_that_once_went_wrong(tmp_path, seed):
    home = record_reading.write_records(seed["case"], tmp_path)
    assert record_reading.read_case(seed["case"], home) == seed["ends"]


@pytest.mark.parametrize("number", range(8))
def test_some_new_cases(tmp_path, number):
    for kind, new_case in (("recording", recording_cases.new_case), ("records", record_damage.new_case)):
        answer = fuzz.runner(kind)(_harmless(new_case, number), tmp_path)
        assert answer["ended"] in ("read", "refused"), answer


def _harmless(new_case, number):
    """A case by chance; damage to bytes may kill the process, and the suite reads in its own."""
    for attempt in range(1000):
        case = new_case(random.Random(f"suite {number} {attempt}"))
        if "base" not in case or all(step[0] in damage.STRUCTURE for step in case["damages"]):
            return case
    raise AssertionError("no case without damage to bytes")


def test_the_command_finds_what_is_wrong(monkeypatch, capsys, tmp_path):
    # Its own complaints: an exception, an error without facts, and none of a refusal with all of them.
    run = fuzz.runner("recording")
    case = {"base": "plain", "settings": 0, "damages": [["cut", 20_000]], "more": ""}
    assert run(case, tmp_path) == {"ended": "refused"}
    monkeypatch.setattr(reading, "survey_recording", lambda *facts: 1 / 0)
    assert "ZeroDivisionError" in run(case, tmp_path)["why"]
    with pytest.raises(reading.WrongError, match="expected"):
        reading.check_error(OdographError("a", file="b", remedy="c"))


def test_the_command_ends_with_what_it_did(capsys):
    assert fuzz.search("records", minutes=1.0, seed=4, most=2) == 0
    assert "2 cases" in capsys.readouterr().out


# ---- processes that die or hang


def damaged(tmp_path, case):
    """The recording of a case, and a request to survey it."""
    path = reading.write_recording(case, tmp_path)
    return path, Request(
        "walk", str(path), canonical_json(IntakeSettings(**SETTINGS[case["base"]][case["settings"]]))
    )


@pytest.fixture
def endless():
    """HDF5 goes round in circles in this file, within a call that cannot be interrupted."""
    (seed,) = json.loads((SEEDS / "endless.json").read_text(encoding="utf-8"))
    return seed["case"]


def test_a_recording_whose_reading_never_ends_is_a_finding(tmp_path, endless):
    path, request = damaged(tmp_path, endless)
    error = survey([request], workers=1, patience_s=4.0)["walk"]["error"]
    reading.check_facts(error)
    assert error["file"] == str(path)
    assert "was still being read after 4 s" in error["found"]


@pytest.fixture
def falling_reader(tmp_path, monkeypatch):
    """A stand-in for a library that falls over a damaged file: the reader kills itself on a name."""
    (tmp_path / "falling_reader.py").write_text(
        "import json, os, sys\n"
        "for line in sys.stdin:\n"
        "    if json.loads(line)['session'] == 'bad': os.kill(os.getpid(), 11)\n"
        "    print(json.dumps({'units': {}}), flush=True)\n",
        encoding="utf-8",
    )
    monkeypatch.setenv("PYTHONPATH", str(tmp_path))
    monkeypatch.setattr("odograph.provenance.survey._READER", "falling_reader")


@pytest.mark.usefixtures("falling_reader")
def test_a_reader_that_dies_is_a_finding_and_the_next_recording_is_read():
    answers = survey([Request("bad", "bad.nwb", "{}"), Request("good", "good.nwb", "{}")], workers=1)
    reading.check_facts(answers["bad"]["error"])
    assert "signal 11" in answers["bad"]["error"]["found"]
    assert answers["good"] == {"units": {}}


@pytest.mark.usefixtures("falling_reader")
def test_the_job_that_says_why_does_not_die_of_it():
    """The inventory of a recording that killed its reader when the run was planned."""
    step = SimpleNamespace(session="bad", source={"intake": {}}, plan={})
    error = _error_again(step, "bad.nwb")
    assert "signal 11" in reading.check_error(error) and error.file == "bad.nwb"
    assert _error_again(SimpleNamespace(session="good", source={"intake": {}}, plan={}), "good.nwb") is None


# ---- memory, waiting and other files


def refused(path, **values):
    with pytest.raises(InputError) as caught:
        read_recording(path, IntakeSettings(**values))
    reading.check_error(caught.value)
    return caught.value


def case(*damages, name="plain", number=0):
    return {"base": name, "settings": number, "damages": list(damages), "more": ""}


@pytest.mark.parametrize(
    ("place", "shape", "kind"),
    [
        (f"{POSITION}/head/data", [10**12, 2], "f8"),
        (f"{POSITION}/head/timestamps", [10**12], "f8"),
        ("units/spike_times", [10**12], "f8"),
        ("units/id", [10**11], "i8"),
        ("session_description", [10**12], "u1"),
        ("file_create_date", [10**9, 2], "u1"),
        ("session_start_time", [3 * 10**8], "text"),
        ("general/subject/age", [2 * 10**8], "f8"),
    ],
)
def test_data_that_are_only_declared_take_no_memory(tmp_path, place, shape, kind):
    resource = pytest.importorskip("resource")
    damages = [["declare", place, shape, kind, 64]]
    if place == "units/spike_times":
        damages.append(["index", "units/spike_times_index", "enormous"])
    path = reading.write_recording(case(*damages), tmp_path)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    error = refused(path)
    assert error.place == place
    grown_kb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before
    assert grown_kb < 500_000


def test_constants_that_compress_well_are_read(tmp_path):
    # Deflate packs no better than 1032 to 1 (RFC 1951: 258 bytes from two bits).
    path = tmp_path / "recording.nwb"
    path.write_bytes(base("plain"))
    with h5py.File(path, "r+") as file:
        n = 3_000_000
        kept = dict(file[f"{POSITION}/head/data"].attrs), dict(file[f"{POSITION}/head/timestamps"].attrs)
        del file[f"{POSITION}/head/data"], file[f"{POSITION}/head/timestamps"]
        values = np.zeros((n, 2))
        values[::100_000] = 1.0
        data = file.create_dataset(
            f"{POSITION}/head/data", data=values, compression="gzip", chunks=(n // 10, 2)
        )
        times = file.create_dataset(f"{POSITION}/head/timestamps", data=np.arange(n) * 1e-3)
        data.attrs.update(kept[0])
        times.attrs.update(kept[1])
        assert data.id.get_storage_size() < 16 * n / 500
    assert len(read_recording(path, IntakeSettings(), units=()).tracks[0].xy_m) == n


def test_a_link_to_a_pipe_is_not_waited_for(tmp_path):
    path = reading.write_recording(case(["pipe link", f"{POSITION}/head/data"]), tmp_path)
    error = refused(path, missing_links="warn")
    assert "no file" in error.found and "pipe" in error.found


def test_a_pipe_that_other_links_lead_through_is_not_waited_for(tmp_path):
    # The shank's device is a soft link to /general/devices/probe; the walk comes to it last.
    path = reading.write_recording(case(["pipe link", "general/devices"], name="full"), tmp_path)
    assert refused(path, missing_links="warn").place == "general/devices"
    path = reading.write_recording(case(["pipe link", f"{POSITION}/head/data"]), tmp_path)
    path.rename(tmp_path / "other.nwb")
    path = reading.write_recording(
        case(["external link", "processing/behavior", "other.nwb", "/processing/behavior"]), tmp_path
    )
    error = refused(path, missing_links="warn")
    assert error.place == f"processing/behavior/{POSITION}/head/data" and "pipe" in error.found


def test_groups_that_hold_each_other_are_refused(tmp_path):
    path = reading.write_recording(case(["diamonds", "processing", 40]), tmp_path)
    assert "no end" in refused(path).found
    assert follow_links(path).paths == MOST_PATHS
    few = reading.write_recording(case(["diamonds", "scratch", 3]), tmp_path)
    # A chain of three groups, each reached twice from the one above: 1 + 2 + 4 + 8 ways, and their holder.
    whole = tmp_path / "whole.nwb"
    whole.write_bytes(base("plain"))
    assert follow_links(few).paths - follow_links(whole).paths == 1 + 1 + 2 + 4 + 8


def test_data_in_a_file_of_raw_bytes_are_not_taken(tmp_path):
    (tmp_path / "secret.bin").write_bytes(np.arange(200.0).tobytes())
    path = reading.write_recording(
        case(["stored outside", f"{POSITION}/head/timestamps", "secret.bin"]), tmp_path
    )
    error = refused(path)
    assert "outside the file" in error.found and "secret.bin" in error.found


def test_virtual_data_are_read_while_their_source_is_there(tmp_path):
    path = reading.write_recording(case(["virtual", f"{POSITION}/head/timestamps", "other.h5"]), tmp_path)
    assert "other.h5" in refused(path).found
    with h5py.File(tmp_path / "other.h5", "w") as other:
        other["data"] = np.arange(200) * 0.02
    read = read_recording(path, IntakeSettings(), units=())
    np.testing.assert_array_equal(read.tracks[0].time_s, np.arange(200) * 0.02)
    assert read.file.linked_files == (tmp_path / "other.h5",)


def test_a_refused_recording_is_looked_at_again_when_its_link_comes_back(tmp_path):
    path = reading.write_recording(
        case(["external link", f"{POSITION}/head/data", "other.nwb", "/data"]), tmp_path
    )
    answer = survey_recording("walk", str(path), IntakeSettings())
    assert "lead nowhere" in answer["error"]["found"]
    assert answer["links"] == [(tmp_path / "other.nwb").as_posix()]


@pytest.mark.parametrize("ends", [[5, 3], [5, 99], [-1, 4], [2**63, 4], [0.5, 4.0], [7], [1, 2, 3]])
def test_indexes_that_do_not_fit_are_refused_and_others_divide_the_data(tmp_path, ends):
    path = tmp_path / "recording.nwb"
    path.write_bytes(base("plain"))
    with h5py.File(path, "r+") as file:
        kept = dict(file["units/spike_times_index"].attrs)
        del file["units/spike_times_index"]
        file["units"].create_dataset("spike_times_index", data=ends).attrs.update(kept)
    found = refused(path).found
    assert "index" in found or "malformed" in found


# ---- any text, any JSON, any numbers


ANY_JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=12,
)


@QUICKLY
@given(document=ANY_JSON)
def test_no_document_but_a_record_passes_for_one(tmp_path, document):
    assert fault_of_record(document) and fault_of_root(document)
    path = tmp_path / "record.json"
    path.write_text(readable_json(document), encoding="utf-8")
    with pytest.raises(OdographError) as caught:
        read_record(path)
    reading.check_error(caught.value)


@QUICKLY
@given(
    data=st.binary(max_size=60) | st.text(max_size=60).map(lambda text: text.encode("utf-8", "surrogatepass"))
)
def test_any_bytes_are_json_or_refused(tmp_path, data):
    path = tmp_path / "some.json"
    path.write_bytes(data)
    try:
        document = read_json(path)
    except InputError as error:
        reading.check_error(error)
    else:
        assert readable_json(document).encode()


CELLS = st.text(st.characters(codec="utf-8"), max_size=12)


@QUICKLY
@given(rows=st.lists(st.lists(CELLS, max_size=4), max_size=4), head=st.booleans())
def test_any_text_is_a_sessions_table_or_refused(tmp_path, rows, head):
    path = tmp_path / "sessions.tsv"
    lines = ["session\tnwb"] * head + ["\t".join(row) for row in rows]
    path.write_bytes("\n".join(lines).encode())
    try:
        found = read_sessions(path)
    except InputError as error:
        reading.check_error(error)
    else:
        assert all(("x" + row.session.replace("-", "_")).isidentifier() for row in found)
        assert all(row.session.isascii() and row.session[0] != "-" for row in found)
        assert all("/" not in row.session and "\n" not in row.session for row in found)


@QUICKLY
@given(text=st.text(max_size=80) | st.sampled_from(record_damage.TEXTS))
def test_any_text_is_a_configuration_or_refused(tmp_path, text):
    path = tmp_path / "config.yaml"
    path.write_bytes(text.encode("utf-8", "replace"))
    try:
        load_settings(path)
    except OdographError as error:
        assert error.file == str(path) and error.message()


@QUICKLY
@given(
    ends=st.lists(st.integers(0, 12), min_size=1, max_size=6).map(sorted),
    wanted=st.sets(st.integers(0, 5)),
)
def test_ragged_columns_are_divided_at_their_ends(ends, wanted):
    """Compared with numpy's split of the whole."""

    class Column:
        def __init__(self, data):
            self.data = data

    class Opened:
        def array(self, data, place, part=slice(None)):
            return np.asarray(data)[part]

    entries = np.arange(float(ends[-1]))
    index = Column(np.array(ends, dtype=np.uint8))
    index.target = Column(entries)

    class Table(dict):
        id = ends

    rows = sorted(row for row in wanted if row < len(ends))
    found = read_ragged(Opened(), Table(spikes=index), "units", "spikes", rows)
    pieces = np.split(entries, ends[:-1])
    assert list(found) == rows
    for row in rows:
        np.testing.assert_array_equal(found[row], pieces[row])
