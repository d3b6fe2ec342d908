"""Planning: what is read again, which plan files move, and what a recording that kills its reader does."""

import json
import os
import sys
from pathlib import Path

import pytest

from odograph.errors import InputError, SettingsError
from odograph.provenance import plan_files as planning
from odograph.provenance import survey as surveying
from odograph.provenance.layout import shard_of
from odograph.provenance.plan import STAGES_READ, STEPS, make_plan
from odograph.provenance.survey import Request, survey

SIGNALS = {"tracking": "sha256:t", "frame_pulses": "sha256:p", "arena": "sha256:a"}


class Recordings:
    """Stands for the reader: what each recording holds, and which were read."""

    def __init__(self):
        self.content = {}
        self.read = []

    def __call__(self, requests):
        self.read = sorted(request.session for request in requests)
        return {
            request.session: self.content.get(request.session, {"inventory": "sha256:i", "signals": SIGNALS})
            | {
                "units": self.content.get(request.session, {}).get(
                    "units", {"1": "sha256:1", "2": "sha256:2"}
                )
            }
            for request in requests
        }


@pytest.fixture
def recordings(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("config").mkdir()
    for name in ("a", "b"):
        Path(f"{name}.nwb").write_text(name)
    table("session\tnwb", "a\ta.nwb", "b\tb.nwb")
    reader = Recordings()
    monkeypatch.setattr(planning, "survey", reader)
    return reader


def table(*lines):
    Path("config/sessions.tsv").write_text("\n".join(lines) + "\n")


def stamps():
    return {str(path): path.stat().st_mtime_ns for path in Path("results/plan").rglob("*.json")}


def age():
    """Give every plan file a time stamp of long ago, so that a rewritten one shows."""
    for path in Path("results/plan").rglob("*.json"):
        os.utime(path, ns=(10**9, 10**9))


def moved():
    return {path for path, stamp in stamps().items() if stamp != 10**9}


def test_unchanged_recordings_are_not_read_and_no_file_moves(recordings):
    first = make_plan({})
    assert recordings.read == ["a", "b"]
    age()
    assert make_plan({}) == first
    assert recordings.read == []
    assert moved() == set()


def test_a_touched_recording_is_read_but_no_plan_file_of_a_job_moves(recordings):
    first = make_plan({})
    os.utime("a.nwb", ns=(5, 5))
    age()
    assert make_plan({}) == first
    assert recordings.read == ["a"]
    assert moved() == {"results/plan/cache.json"}


def test_a_changed_unit_moves_intake_and_its_shard_only(recordings):
    first = make_plan({})
    recordings.content["a"] = {
        "inventory": "sha256:j",
        "signals": SIGNALS,
        "units": {"1": "sha256:1", "2": "sha256:x"},
    }
    os.utime("a.nwb", ns=(5, 5))
    age()
    second = make_plan({})
    shard = shard_of("a", 2, 4)
    folder = "results/plan/sessions/a"
    assert moved() == {"results/plan/cache.json", f"{folder}/intake.json", f"{folder}/shard-{shard}.json"}
    different = {name for name in first.digests if first.digests[name] != second.digests[name]}
    assert different == {"a/intake", f"a/shard-{shard}"}


def test_a_changed_signal_moves_the_steps_that_read_it(recordings):
    first = make_plan({})
    recordings.content["a"] = {"inventory": "sha256:j", "signals": SIGNALS | {"frame_pulses": "sha256:q"}}
    os.utime("a.nwb", ns=(5, 5))
    second = make_plan({})
    different = {name for name in first.digests if first.digests[name] != second.digests[name]}
    assert different == {"a/intake", "a/sync"}


def test_every_unit_is_in_one_shard_whatever_their_number(recordings):
    recordings.content["a"] = {
        "signals": SIGNALS,
        "inventory": "",
        "units": {str(n): f"sha256:{n}" for n in range(50)},
    }
    for shards in (4, 1, 7):
        make_plan({"study": {"shards_per_session": shards}})
        files = [Path(f"results/plan/sessions/a/shard-{shard}.json") for shard in range(shards)]
        units = [set(json.loads(file.read_text())["units"]) for file in files]
        assert sum(map(len, units)) == len(set.union(*units)) == 50
        assert recordings.read == (["a", "b"] if shards == 4 else [])


def test_a_unit_that_comes_moves_no_other(recordings):
    before = {unit: shard_of("a", unit, 8) for unit in range(100)}
    assert {unit: shard_of("a", unit, 8) for unit in range(101)} == before | {100: shard_of("a", 100, 8)}
    assert set(before.values()) == set(range(8))


def test_plan_files_that_were_deleted_come_back_without_reading(recordings):
    first = make_plan({})
    kept = Path("results/plan/sessions/a/sync.json").read_text()
    Path("results/plan/sessions/a/sync.json").unlink()
    assert make_plan({}) == first
    assert recordings.read == []
    assert Path("results/plan/sessions/a/sync.json").read_text() == kept


def test_a_job_that_parses_the_workflow_again_reads_and_writes_nothing(recordings):
    first = make_plan({})
    os.utime("a.nwb", ns=(5, 5))
    recordings.read = []
    age()
    assert make_plan({}, main_process=False) == first
    assert recordings.read == []
    assert moved() == set()


def test_a_look_beside_a_run_leaves_out_sessions_that_are_new(recordings):
    first = make_plan({})
    Path("c.nwb").write_text("c")
    table("session\tnwb", "a\ta.nwb", "b\tb.nwb", "c\tc.nwb")
    assert make_plan({}, main_process=False) == first
    assert make_plan({}).sessions == ("a", "b", "c")


def test_intake_settings_make_a_session_read_again_and_others_do_not(recordings):
    make_plan({})
    make_plan({"encoding": {"folds": 5}})
    assert recordings.read == []
    table("session\tnwb\tintake.length_unit", "a\ta.nwb\tcentimetres", "b\tb.nwb\t")
    make_plan({})
    assert recordings.read == ["a"]


def test_settings_go_to_the_steps_that_read_them(recordings):
    one = make_plan({})
    other = make_plan({"behaviour": {"max_gap_s": 0.2}})
    different = {name for name in one.settings if one.settings[name] != other.settings[name]}
    assert different == {"a/behaviour", "b/behaviour", "behaviour", "report"}
    table("session\tnwb\tbehaviour.max_gap_s", "a\ta.nwb\t0.1", "b\tb.nwb\t")
    own = make_plan({})
    different = {name for name in one.settings if one.settings[name] != own.settings[name]}
    assert different == {"a/behaviour"}
    assert json.loads(own.settings_of("behaviour", "a"))["behaviour"]["max_gap_s"] == 0.1


def test_a_missing_file_is_that_session_s_failure(recordings, capsys):
    Path("b.nwb").unlink()
    found = make_plan({})
    assert found.readable == ("a",)
    assert found.unreadable["b"]["level"] == "fail"
    assert "b.nwb: there is no such file" in capsys.readouterr().err
    assert recordings.read == ["a"]
    Path("b.nwb").write_text("back")
    assert make_plan({}).readable == ("a", "b")


def test_stop_refuses_to_plan_with_a_recording_that_cannot_be_used(recordings):
    Path("b.nwb").unlink()
    with pytest.raises(InputError, match=r"session b cannot be used: b\.nwb"):
        make_plan({"study": {"on_bad_session": "stop"}})


def test_a_linked_file_is_looked_at_too(recordings):
    Path("other.nwb").write_text("x")
    recordings.content["a"] = {"inventory": "", "signals": SIGNALS, "links": ["other.nwb"]}
    make_plan({})
    make_plan({})
    assert recordings.read == []
    os.utime("other.nwb", ns=(5, 5))
    make_plan({})
    assert recordings.read == ["a"]


def test_wrong_settings_end_the_planning(recordings):
    with pytest.raises(SettingsError, match="folds"):
        make_plan({"encoding": {"fold": 5}})


def test_the_population_follows_who_belongs_to_it(recordings):
    first = make_plan({})
    table("session\tnwb\tanimal", "b\tb.nwb\t", "a\ta.nwb\t")
    assert make_plan({}).digests["population"] == first.digests["population"]
    table("session\tnwb\tanimal", "a\ta.nwb\tmouse", "b\tb.nwb\t")
    assert make_plan({}).digests["population"] != first.digests["population"]


def test_a_damaged_cache_is_made_anew(recordings):
    first = make_plan({})
    Path("results/plan/cache.json").write_text("{")
    assert make_plan({}) == first
    assert recordings.read == ["a", "b"]


@pytest.mark.parametrize("old, new", [('"a.nwb"', '"b.nwb"'), ("sha256:", "sha256;"), ("{", "[")])
def test_a_cache_with_a_changed_byte_is_made_anew(recordings, old, new):
    first = make_plan({})
    path = Path("results/plan/cache.json")
    whole = path.read_text()
    path.write_text(whole.replace(old, new, 1))
    assert path.read_text() != whole
    assert make_plan({}) == first
    assert recordings.read == ["a", "b"]
    assert path.read_text() == whole


@pytest.mark.parametrize("step, read", [("sync", []), ("shard-0", []), ("intake", ["a"])])
@pytest.mark.parametrize("content", ["", "{", '{"units": {}}'])
def test_a_damaged_plan_file_is_written_anew(recordings, step, read, content):
    first = make_plan({})
    path = Path(f"results/plan/sessions/a/{step}.json")
    whole = path.read_text()
    path.write_text(content)
    assert make_plan({}) == first
    assert path.read_text() == whole
    assert recordings.read == read


def test_a_recording_that_changes_while_it_is_read_is_read_again(recordings, monkeypatch, capsys):
    def replaced_once(requests):
        answers = recordings(requests)
        if "a" in answers and not recordings.content:
            recordings.content["a"] = {
                "inventory": "sha256:j",
                "signals": SIGNALS,
                "units": {"7": "sha256:7"},
            }
            Path("new").write_text("the next sorting")
            Path("new").replace("a.nwb")
        return answers

    monkeypatch.setattr(planning, "survey", replaced_once)
    plan = make_plan({})
    assert json.loads(Path("results/plan/sessions/a/intake.json").read_text())["units"] == {"7": "sha256:7"}
    assert recordings.read == ["a"]
    assert "a.nwb: changed while it was read" in capsys.readouterr().err
    assert make_plan({}) == plan and recordings.read == []


def test_a_recording_that_never_rests_is_refused(recordings, monkeypatch):
    def written_to(requests):
        with Path("b.nwb").open("a") as file:
            file.write("more")
        return recordings(requests)

    monkeypatch.setattr(planning, "survey", written_to)
    with pytest.raises(InputError, match=r"b.nwb: .*changed 3 times(.|\n)*wait until"):
        make_plan({})


def test_every_step_says_what_it_reads():
    assert set(STAGES_READ) == set(STEPS)


READER = """
import json, os, sys
for line in sys.stdin:
    request = json.loads(line)
    if request["session"] == "deadly":
        os.kill(os.getpid(), 9)
    print(json.dumps({"inventory": request["nwb"], "pid": os.getpid()}), flush=True)
"""


def test_a_recording_that_kills_its_reader_takes_no_other_with_it(tmp_path, monkeypatch):
    (tmp_path / "stand_in_reader.py").write_text(READER)
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([str(tmp_path), *sys.path]))
    monkeypatch.setattr(surveying, "_READER", "stand_in_reader")
    names = ["a", "deadly", "b", "c"]
    answers = survey([Request(name, f"{name}.nwb", "{}") for name in names], workers=1)
    assert set(answers) == set(names)
    assert answers["deadly"]["error"]["found"].endswith("(signal 9)")
    assert not answers["deadly"]["settled"]
    assert [answers[name]["inventory"] for name in ("a", "b", "c")] == ["a.nwb", "b.nwb", "c.nwb"]
    assert answers["a"]["pid"] != answers["b"]["pid"] == answers["c"]["pid"]


def test_links_to_other_files_are_found(tmp_path):
    import h5py

    from odograph.steps.survey_recordings import linked_files

    with h5py.File(tmp_path / "there.h5", "w") as there:
        there.create_dataset("group/data", data=[1.0])
    with h5py.File(tmp_path / "here.h5", "w") as here:
        here["a/inside"] = h5py.SoftLink("/a")
        here["a/outside"] = h5py.ExternalLink("there.h5", "/group")
    assert linked_files(str(tmp_path / "here.h5")) == [(tmp_path / "there.h5").as_posix()]
