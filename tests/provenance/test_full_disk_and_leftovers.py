"""Writing on a full disk, what killed writers leave behind, and files that keep what is known."""

import errno
import os
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from odograph.errors import DiskFullError
from odograph.provenance.files import write_json, write_text
from odograph.provenance.known import keep_known, read_known
from odograph.provenance.renaming import is_full, leftovers, renamed_into_place

KILLED = """
import os, signal, sys
from odograph.provenance.renaming import renamed_into_place
with renamed_into_place(sys.argv[1]) as temporary:
    temporary.write_text("half")
    os.kill(os.getpid(), signal.SIGKILL)
"""


def leave(path):
    subprocess.run([sys.executable, "-c", KILLED, str(path)], check=False)
    (left,) = path.parent.glob(f".{path.stem}.*")
    return left


def test_what_a_killed_writer_left_is_removed_by_the_next_one(tmp_path):
    path = tmp_path / "units.parquet"
    left = leave(path)
    other = leave(tmp_path / "scores.parquet")
    assert left.read_text() == "half" and not path.exists()
    assert leftovers(tmp_path) == sorted([left, other])
    write_text(path, "whole")
    assert sorted(tmp_path.iterdir()) == sorted([other, path])


def test_a_file_that_is_being_written_is_left_alone(tmp_path):
    with renamed_into_place(tmp_path / "units.parquet") as first:
        first.write_text("first")
        write_text(tmp_path / "units.parquet", "second")
        assert first.read_text() == "first"
        assert leftovers(tmp_path) == []
    assert (tmp_path / "units.parquet").read_text() == "first"


@pytest.mark.parametrize("age_s, gone", [(60.0, False), (90_000.0, True)])
def test_what_another_machine_left_goes_by_its_age(tmp_path, age_s, gone):
    left = tmp_path / ".units.elsewhere-1-0123abcd.tmp.parquet"
    left.write_text("half")
    now = left.stat().st_mtime
    (tmp_path / "now").touch()
    os.utime(left, (now - age_s, now - age_s))
    assert (leftovers(tmp_path) == [left]) is gone


def test_names_are_never_shared(tmp_path):
    with renamed_into_place(tmp_path / "a.json") as one, renamed_into_place(tmp_path / "a.json") as two:
        assert one != two
        assert str(os.getpid()) in one.name
        one.touch()
        two.touch()
    assert socket.gethostname()


def fill(monkeypatch, number):
    def full(handle):
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(os, "fsync", full)


@pytest.mark.parametrize(
    "number, told", [(errno.ENOSPC, "no space left on the disk"), (errno.EDQUOT, "the disk quota is used up")]
)
def test_a_full_disk_is_told_as_what_it_is(tmp_path, monkeypatch, number, told):
    path = tmp_path / "summary.json"
    write_json(path, {"units": 1})
    before = path.read_bytes()
    fill(monkeypatch, number)
    with pytest.raises(DiskFullError) as caught:
        write_json(path, {"units": 2})
    message = str(caught.value)
    assert message.startswith(f"{path}: {told}")
    assert "MB are free" in message and "run snakemake again" in message
    assert path.read_bytes() == before
    assert list(tmp_path.iterdir()) == [path]


def test_other_faults_of_the_disk_stay_what_they_are(tmp_path, monkeypatch):
    fill(monkeypatch, errno.EIO)
    with pytest.raises(OSError) as caught:
        write_json(tmp_path / "summary.json", {})
    assert caught.value.errno == errno.EIO and not is_full(caught.value)


def test_an_error_that_came_from_a_full_disk_is_known(tmp_path):
    try:
        try:
            raise OSError(errno.ENOSPC, "full")
        except OSError as error:
            raise RuntimeError("a library's own") from error
    except RuntimeError as error:
        assert is_full(error)
    assert not is_full(RuntimeError("another"))


def test_what_is_known_reads_back_and_a_changed_byte_is_found(tmp_path):
    path = tmp_path / "known.json"
    assert read_known(path) == {}
    document = {"sessions": {"a": [1, 2.5, None]}, "text": "ü"}
    keep_known(path, document)
    assert read_known(path) == document
    whole = path.read_bytes()
    for place in range(0, len(whole), 7):
        damaged = bytearray(whole)
        damaged[place] ^= 1
        path.write_bytes(damaged)
        assert read_known(path) == {}
    for size in (0, 1, 40, len(whole) - 1):
        path.write_bytes(whole[:size])
        assert read_known(path) == {}
    assert Path(path).exists()
