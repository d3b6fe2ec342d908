"""Links between files: followed where they hold, listed where they do not."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

from odograph.recording.digest import signal_digests
from odograph.recording.links import follow_links
from odograph.recording.reader import read_recording

POSITION = "processing/behavior/Position"


@pytest.fixture
def two_files(nwb):
    """A recording whose whole behaviour is kept in another file, and that other file."""
    other = nwb.write(nwb.tracking(), nwb.units(), name="other.nwb")
    main = nwb.write(nwb.units(), name="main.nwb")
    with h5py.File(main, "r+") as file:
        file["processing/behavior"] = h5py.ExternalLink("other.nwb", "/processing/behavior")
    return main, other


def test_a_signal_in_another_file_is_the_same_signal(nwb, two_files):
    main, other = two_files
    linked, own = read_recording(main, nwb.settings()), read_recording(other, nwb.settings())
    assert linked.tracks[0].place == f"{POSITION}/head"
    assert signal_digests(linked) == signal_digests(own)
    assert linked.file.linked_files == (other,) and own.file.linked_files == ()


def test_data_alone_in_another_file(nwb):
    other = nwb.write(nwb.tracking(), name="other.nwb")
    main = nwb.usual()
    with h5py.File(main, "r+") as file:
        for name in ("data", "timestamps"):
            del file[f"{POSITION}/head/{name}"]
            file[f"{POSITION}/head/{name}"] = h5py.ExternalLink("other.nwb", f"/{POSITION}/head/{name}")
    recording = read_recording(main, nwb.settings())
    np.testing.assert_array_equal(recording.tracks[0].xy_m, nwb.walk())
    assert recording.file.linked_files == (other,)


def test_a_linked_place_leads_to_the_object(nwb):
    path = nwb.usual()
    with h5py.File(path, "r+") as file:
        file["acquisition/walked"] = h5py.SoftLink(f"/{POSITION}")
    for place in ("acquisition/walked", "acquisition/walked/head"):
        recording = read_recording(path, nwb.settings(position_place=place))
        assert recording.tracks[0].place == f"{POSITION}/head"


def test_second_points_that_link_to_the_time_stamps_of_the_first(nwb):
    path = nwb.write(nwb.tracking(("front", "back")), nwb.units())
    with h5py.File(path, "r") as file:
        assert isinstance(file[POSITION].get("back/timestamps", getlink=True), h5py.SoftLink)
    tracks = read_recording(path, nwb.settings(front_point="front", back_point="back")).tracks
    np.testing.assert_array_equal(tracks[0].time_s, tracks[1].time_s)


def test_following_links_ends_in_circles_and_names_every_missing_one(nwb):
    path = nwb.folder / "circle.h5"
    with h5py.File(path, "w") as file:
        inner = file.create_group("a/b")
        inner["up"] = file["a"]
        inner["top"] = h5py.SoftLink("/")
        inner["self"] = h5py.SoftLink("/a/b/self")
        file["z"] = h5py.ExternalLink("nowhere.h5", "/x")
    links = follow_links(path)
    assert [link.place for link in links.missing] == ["a/b/self", "z"]
    assert links.missing[1].describe() == "z -> nowhere.h5:/x"
    assert links.files == ()
