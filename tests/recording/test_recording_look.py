"""`odograph look`: what it finds, and that the lines it proposes read the file."""

from __future__ import annotations

import argparse
import json

import h5py
import numpy as np
import pytest
import yaml

from odograph.command import look
from odograph.recording.reader import read_recording
from odograph.recording.survey import propose
from odograph.settings.intake import IntakeSettings


def run(*words: str) -> int:
    parser = argparse.ArgumentParser()
    look.add_parser(parser.add_subparsers())
    args = parser.parse_args(["look", *words])
    return args.run(args)


@pytest.fixture
def full(nwb):
    """A recording with a candidate for everything."""
    return nwb.write(
        nwb.subject(),
        nwb.tracking(("head_front", "head_back"), time_s=nwb.frame_times(start=900.0)),
        nwb.direction(np.ones(400)),
        nwb.events(nwb.frame_times(start=2.0), name="camera_frames"),
        nwb.events([3.0, 4.0], name="licks"),
        nwb.arena([[0, 0], [1, 0], [0, 1]]),
        nwb.units(
            [nwb.spikes() + 2, nwb.spikes(seed=3) + 2], columns={"grade": ["good", "poor"], "depth": [1, 2]}
        ),
    )


def test_the_proposed_lines_read_the_file(full, capsys):
    assert run(str(full)) == 0
    text = capsys.readouterr().out
    for word in ("400 x 2", "50 Hz", "meters", "2 units, 120 spikes", "column grade: good, poor", "heather"):
        assert word in text
    lines = yaml.safe_load(text[text.index("\nintake:") :])
    settings = IntakeSettings(**lines["intake"])
    assert (settings.front_point, settings.back_point) == ("head_front", "head_back")
    assert settings.frame_pulses_place == "events/camera_frames"
    recording = read_recording(full, settings)
    assert len(recording.tracks) == 2 and recording.direction is not None and recording.arena is not None


def test_json_says_the_same(full, capsys):
    assert run(str(full), "--json") == 0
    found = json.loads(capsys.readouterr().out)
    assert found["verdict"] == "pass" and len(found["tracking"]) == 2
    assert found["proposed"]["units_place"] == "units"
    assert found["units"][0]["columns"] == [
        {"column": "depth", "values": "1 to 2"},
        {"column": "grade", "values": "good, poor"},
    ]


def test_choices_that_only_the_user_can_make(nwb, capsys):
    path = nwb.write(nwb.tracking(("red", "green"), unit="pixels"), nwb.units())
    assert run(str(path)) == 65
    text = capsys.readouterr().out
    assert "# front_point: choose one of" in text and "# length_unit: choose one of" in text
    assert yaml.safe_load(text[text.index("\nintake:") :])["intake"] == {
        "position_place": "processing/behavior/Position",
        "units_place": "units",
    }


def test_a_bad_file_is_told_with_its_exit_code(nwb, capsys):
    assert run(str(nwb.folder / "gone.nwb")) == 66
    assert "no such file" in capsys.readouterr().err
    broken = nwb.folder / "broken.nwb"
    broken.write_bytes(b"not a recording")
    assert run(str(broken), "--json") == 65
    caught = capsys.readouterr()
    assert (
        json.loads(caught.out)["findings"][0]["found"] == "not an HDF5 file" and "not an HDF5" in caught.err
    )


def test_a_file_that_opens_but_cannot_be_used(nwb, capsys):
    path = nwb.write(nwb.tracking(), nwb.units([nwb.spikes()[::-1]]))
    assert run(str(path)) == 65
    assert "fail: units id 0: spike times out of order" in capsys.readouterr().out


def test_lost_links_do_not_stop_a_look(nwb, capsys):
    path = nwb.usual()
    with h5py.File(path, "r+") as file:
        file["acquisition/raw"] = h5py.ExternalLink("gone.nwb", "/x")
    assert run(str(path)) == 0
    assert "missing_links: warn" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("names", "front", "back"),
    [
        (["led_front", "led_back"], "led_front", "led_back"),
        (["nose", "neck", "tailbase"], "nose", "neck"),
        (["one", "two"], None, None),
        (["front_left", "front_right", "rear"], None, None),
    ],
)
def test_points_are_proposed_by_plain_names_only(names, front, back):
    entries = [{"place": f"a/Position/{name}", "shape": [10, 2], "unit": "m"} for name in names]
    proposed, choices = propose(
        {"tracking": entries, "directions": [], "pulses": [], "arenas": [], "units": []}
    )
    assert (proposed.get("front_point"), proposed.get("back_point")) == (front, back)
    assert ("front_point" in choices) == (front is None)


@pytest.mark.parametrize(
    "value",
    ["processing/behavior/a b", "events/x: y", "yes", "12", "é/ü", "a#b", "- a", "null", "plain/place"],
)
def test_pasted_lines_give_back_their_values(value):
    lines = "\n".join(look.configuration_lines({"units_place": value}, {}))
    assert yaml.safe_load(lines)["intake"]["units_place"] == value
