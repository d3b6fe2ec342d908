"""Fetching recordings: what moved comes whole, what cannot be fetched is told, servers may do anything."""

from __future__ import annotations

import hashlib
import os
import threading
from email.utils import formatdate
from pathlib import Path
from types import SimpleNamespace

import pytest
from botocore import exceptions as boto_errors
from requests import exceptions as web_errors

from odograph.errors import DiskFullError
from odograph.provenance import fetching
from odograph.provenance.fetching import WITHDRAWN, fetch_recordings
from odograph.provenance.places import local_place
from odograph.provenance.remote import (
    HttpRemote,
    RefusedError,
    S3Remote,
    SilentError,
    Stamp,
    UnreachableError,
)

ADDRESS = "s3://bucket/day/heath.nwb"
PRIVATE = "hush-hush"
MD5 = hashlib.md5(b"spikes", usedforsecurity=False).hexdigest()


@pytest.fixture(autouse=True)
def no_pauses(monkeypatch):
    monkeypatch.setattr(fetching, "_SECONDS_BETWEEN_TRIES", 0.0)


class Shelf:
    """A recording on a server that does as it is told."""

    def __init__(self, content=b"spikes", **stamp):
        self.content, self.fetches, self.failures = content, 0, []
        self.given = {"size": len(content), "modified": 1.0, "tag": "a"} | stamp

    def put(self, content, tag):
        self.content = content
        self.given |= {"size": len(content), "tag": tag}

    def stamp(self):
        if self.failures and self.failures[0][0] == "look":
            raise self.failures.pop(0)[1]
        return Stamp(**self.given)

    def copy_to(self, path, sign):
        self.fetches += 1
        if self.failures and self.failures[0][0] == "fetch":
            path.write_bytes(self.content[:2])
            raise self.failures.pop(0)[1]
        path.write_bytes(self.content)
        sign(len(self.content))


def bring(shelf, folder, **options):
    return fetch_recordings({ADDRESS: shelf}, folder, **options)


def copy_in(folder):
    return folder / local_place(ADDRESS)


def test_a_recording_is_fetched_once_and_again_when_it_moved(tmp_path):
    shelf = Shelf()
    assert bring(shelf, tmp_path) == {}
    assert copy_in(tmp_path).read_bytes() == b"spikes"
    assert bring(shelf, tmp_path) == {}
    assert shelf.fetches == 1
    shelf.put(b"sorted again", "b")
    assert bring(shelf, tmp_path) == {}
    assert (shelf.fetches, copy_in(tmp_path).read_bytes()) == (2, b"sorted again")
    assert sorted(path.name for path in copy_in(tmp_path).parent.iterdir()) == ["fetched.json", "heath.nwb"]


def test_a_copy_that_was_touched_or_whose_note_is_damaged_is_fetched_again(tmp_path):
    shelf = Shelf()
    bring(shelf, tmp_path)
    copy_in(tmp_path).write_bytes(b"edited")
    bring(shelf, tmp_path)
    assert copy_in(tmp_path).read_bytes() == b"spikes"
    (copy_in(tmp_path).parent / fetching.NOTE).write_text("{")
    bring(shelf, tmp_path)
    assert shelf.fetches == 3


def test_a_server_that_tells_neither_tag_nor_time_is_asked_for_the_content_every_time(tmp_path):
    shelf = Shelf(modified=None, tag=None, size=None)
    bring(shelf, tmp_path)
    assert bring(shelf, tmp_path) == {}
    assert shelf.fetches == 2


def test_a_fetch_that_is_cut_off_is_tried_again_and_never_looks_whole(tmp_path):
    shelf = Shelf()
    shelf.failures = [("fetch", UnreachableError("cut off"))]
    assert bring(shelf, tmp_path) == {}
    assert (shelf.fetches, copy_in(tmp_path).read_bytes()) == (2, b"spikes")
    shelf.put(b"longer than before", "b")
    shelf.failures = [("fetch", UnreachableError("cut off"))] * 3
    assert bring(shelf, tmp_path) == {}, "the copy of before is used"
    assert copy_in(tmp_path).read_bytes() == b"spikes"
    assert not [path for path in copy_in(tmp_path).parent.iterdir() if path.name.startswith(".")]


@pytest.mark.parametrize(
    ("shelf", "found"),
    [
        (Shelf(size=7), "6 bytes came of 7"),
        (Shelf(md5="0" * 32), f"md5 checksum {MD5}"),
        (Shelf(sha256="0" * 64), f"sha256 checksum {hashlib.sha256(b'spikes').hexdigest()}"),
    ],
)
def test_what_is_not_what_the_server_has_is_told(tmp_path, shelf, found):
    finding = bring(shelf, tmp_path)[ADDRESS]
    assert found in finding["found"]
    assert finding["file"] == ADDRESS
    assert finding["expected"] and finding["remedy"]
    assert not copy_in(tmp_path).exists()


def test_right_checksums_pass(tmp_path):
    content = b"spikes"
    shelf = Shelf(md5=MD5, sha256=hashlib.sha256(content).hexdigest())
    assert bring(shelf, tmp_path) == {}


def test_a_recording_that_is_withdrawn_is_set_aside_and_comes_back(tmp_path):
    shelf = Shelf()
    bring(shelf, tmp_path)
    shelf.failures = [("look", RefusedError("there is nothing"))]
    assert bring(shelf, tmp_path)[ADDRESS]["found"] == "there is nothing"
    aside = copy_in(tmp_path).with_name("heath.nwb" + WITHDRAWN)
    assert not copy_in(tmp_path).exists()
    assert aside.read_bytes() == b"spikes"
    assert bring(shelf, tmp_path) == {}
    assert (shelf.fetches, copy_in(tmp_path).read_bytes(), aside.exists()) == (1, b"spikes", False)


def test_out_of_reach_a_copy_is_used_and_said_and_without_one_it_is_a_finding(tmp_path, capsys):
    shelf = Shelf()
    shelf.failures = [("look", SilentError("no answer"))] * 3
    assert bring(shelf, tmp_path)[ADDRESS]["found"] == "no answer"
    bring(shelf, tmp_path)
    shelf.failures = [("look", SilentError("no answer"))] * 3
    assert bring(shelf, tmp_path) == {}
    assert f"{ADDRESS}: no answer; the copy of before is used" in capsys.readouterr().err


def test_a_recording_that_changes_while_it_is_fetched_is_fetched_again_but_not_for_ever(tmp_path):
    class Restless(Shelf):
        changes = 1

        def copy_to(self, path, sign):
            super().copy_to(path, sign)
            if self.changes:
                self.changes -= 1
                self.put(b"version %d" % self.changes, str(self.changes))

    shelf = Restless()
    assert bring(shelf, tmp_path) == {}
    assert copy_in(tmp_path).read_bytes() == b"version 0"
    shelf.changes = 10
    shelf.put(b"x", "y")
    assert "changed 3 times" in bring(shelf, tmp_path)[ADDRESS]["found"]


def test_a_server_that_says_nothing_is_left_behind_and_writes_no_more(tmp_path):
    held, gone_on = threading.Event(), threading.Event()

    class Slow(Shelf):
        def copy_to(self, path, sign):
            held.wait(30)
            try:
                super().copy_to(path, sign)
            finally:
                gone_on.set()

    slow, quick = Slow(), Shelf()
    found = fetch_recordings({ADDRESS: slow, "https://host/quick.nwb": quick}, tmp_path, patience_s=0.5)
    assert list(found) == [ADDRESS]
    assert "nothing came from the server" in found[ADDRESS]["found"]
    held.set()
    assert gone_on.wait(30)
    assert not copy_in(tmp_path).exists()
    assert (tmp_path / local_place("https://host/quick.nwb")).read_bytes() == b"spikes"


def test_a_server_without_an_answer_is_asked_once_for_many_recordings(tmp_path, monkeypatch):
    monkeypatch.setattr(fetching, "_LOOKS_AT_ONCE", 1)
    asked = []

    class Dead(Shelf):
        def stamp(self):
            asked.append(self)
            raise SilentError("no answer")

    remotes = {f"https://host/{number}.nwb": Dead() for number in range(5)} | {"https://other/a.nwb": Shelf()}
    assert len(fetch_recordings(remotes, tmp_path)) == 5
    assert len(asked) == 3


def test_room_is_looked_for_before_anything_is_fetched(tmp_path):
    shelf = Shelf(size=10**18)
    with pytest.raises(DiskFullError, match="1 recordings of 1,000,000,000,000 MB"):
        bring(shelf, tmp_path)
    assert shelf.fetches == 0


# What the two plugins' objects answer


def s3_remote(**calls):
    client = SimpleNamespace(**calls)
    provider = SimpleNamespace(s3c=SimpleNamespace(meta=SimpleNamespace(client=client)))
    return S3Remote(SimpleNamespace(provider=provider, bucket="bucket", key="a.nwb"))


def raising(error):
    def call(*args, **kwargs):
        raise error

    return call


def client_error(code, status):
    answer = {
        "Error": {"Code": code, "Message": f"no entry with {PRIVATE}"},
        "ResponseMetadata": {"HTTPStatusCode": status},
    }
    return boto_errors.ClientError(answer, "HeadObject")


@pytest.mark.parametrize(
    ("error", "kind", "found"),
    [
        (client_error("404", 404), RefusedError, "nothing at this address"),
        (client_error("NoSuchBucket", 404), RefusedError, "nothing at this address"),
        (client_error("403", 403), RefusedError, "does not allow this to be read (403)"),
        (client_error("AccessDenied", 403), RefusedError, "AccessDenied"),
        (client_error("ExpiredToken", 400), SilentError, "expired"),
        (client_error("301", 301), RefusedError, "does not give it (301)"),
        (client_error("SlowDown", 503), UnreachableError, "cannot give it now"),
        (boto_errors.NoCredentialsError(), SilentError, "no credentials"),
        (boto_errors.EndpointConnectionError(endpoint_url=f"http://{PRIVATE}@host"), SilentError, "reached"),
    ],
)
def test_failures_of_object_storage_are_told_without_what_the_library_says(error, kind, found):
    remote = s3_remote(head_object=raising(error), download_file=raising(error))
    for call in (remote.stamp, lambda: remote.copy_to(Path("unused.nwb"), print)):
        with pytest.raises(kind) as caught:
            call()
        assert found in caught.value.found
        assert PRIVATE not in str(caught.value)


@pytest.mark.parametrize(
    ("head", "md5"),
    [
        ({"ETag": f'"{"0a" * 16}"'}, "0a" * 16),
        ({"ETag": f'"{"0a" * 16}-3"'}, None),
        ({"ETag": f'"{"0a" * 16}"', "ServerSideEncryption": "AES256"}, "0a" * 16),
        ({"ETag": f'"{"0a" * 16}"', "ServerSideEncryption": "aws:kms"}, None),
        ({}, None),
    ],
)
def test_the_tag_of_an_object_is_its_md5_only_where_amazon_says_so(head, md5):
    """Amazon S3 API reference, data type Object, ETag."""
    stamp = s3_remote(head_object=lambda **asked: head | {"ContentLength": 3}).stamp()
    assert (stamp.size, stamp.md5) == (3, md5)
    assert stamp.tells == bool(head)


def test_the_checksum_of_an_object_is_taken_when_it_is_that_of_the_whole():
    # SHA-256 of "abc": FIPS 180-2, appendix B.1.
    whole = "ungWv48Bz+pBQUDeXa4iI7ADYaOWF3qctBD/YfIAFa0="
    wanted = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    for given, sha256 in ((whole, wanted), (whole + "-2", None), ("", None)):
        head = {"ContentLength": 3, "ChecksumSHA256": given}
        assert s3_remote(head_object=lambda head=head, **asked: head).stamp().sha256 == sha256


class Answer:
    def __init__(self, status_code=200, body=b"", **headers):
        self.status_code, self.body = status_code, body
        self.headers = {name.replace("_", "-"): value for name, value in headers.items()}

    def __enter__(self):
        return self

    def __exit__(self, *error):
        return None

    def iter_content(self, size):
        return iter([self.body[:4], self.body[4:]])


def http_remote(**answers):
    def httpr(verb, stream):
        assert stream, "a look reads no body"
        return answers[verb] if isinstance(answers[verb], Answer) else answers[verb]()

    return HttpRemote(SimpleNamespace(httpr=httpr))


def test_a_look_at_a_web_server():
    headers = {"Content_Length": "6", "Last_Modified": formatdate(1.7e9, usegmt=True), "ETag": '"x"'}
    assert http_remote(HEAD=Answer(**headers)).stamp() == Stamp(6, 1.7e9, '"x"')
    packed = Answer(Content_Length="6", Content_Encoding="gzip")
    assert http_remote(HEAD=packed).stamp() == Stamp(None, None, None)
    # Signed addresses that a server sends us on to are often good for reading only.
    assert http_remote(HEAD=Answer(403), GET=Answer(ETag="y")).stamp().tag == "y"


@pytest.mark.parametrize(
    ("status", "kind"),
    [
        (404, RefusedError),
        (410, RefusedError),
        (401, RefusedError),
        (302, RefusedError),
        (429, UnreachableError),
        (503, UnreachableError),
    ],
)
def test_an_error_page_is_no_recording(tmp_path, status, kind):
    page = Answer(status, b"<html>sorry</html>")
    with pytest.raises(kind):
        http_remote(HEAD=page).stamp()
    with pytest.raises(kind):
        http_remote(GET=page).copy_to(tmp_path / "a.nwb", print)
    assert not (tmp_path / "a.nwb").exists()


def test_a_body_that_ends_early_is_told(tmp_path):
    signs = []
    http_remote(GET=Answer(body=b"spikes", Content_Length="6")).copy_to(tmp_path / "a.nwb", signs.append)
    assert (tmp_path / "a.nwb").read_bytes() == b"spikes"
    assert signs == [4, 2]
    with pytest.raises(UnreachableError, match="6 bytes of 9"):
        http_remote(GET=Answer(body=b"spikes", Content_Length="9")).copy_to(tmp_path / "a.nwb", print)


@pytest.mark.parametrize(
    "error",
    [
        web_errors.ConnectionError(f"/x?X-Amz-Signature={PRIVATE}"),
        web_errors.SSLError(PRIVATE),
        web_errors.Timeout(PRIVATE),
    ],
)
def test_a_web_server_without_an_answer_is_told_without_the_address_it_sent_us_on_to(error):
    with pytest.raises(SilentError) as caught:
        http_remote(HEAD=raising(error)).stamp()
    assert PRIVATE not in str(caught.value)
    assert type(error).__name__ in caught.value.found


@pytest.mark.parametrize(
    ("address", "name"),
    [
        ("s3://bucket/day/heath.nwb", "heath.nwb"),
        ("https://host/api/assets/17/download/", "download.nwb"),
        ("https://host/a%2Fb%20c.nwb?download=1", "a_b_c.nwb"),
        ("https://host/record.json", "record.json.nwb"),
        ("https://host/.nwb", "nwb.nwb"),
        ("https://host/..nwb", "nwb.nwb"),
    ],
)
def test_a_copy_is_named_like_its_address_and_stays_in_its_folder(address, name):
    place = Path(local_place(address))
    assert place.name == name
    assert place.parts[:2] == ("results", "recordings")
    assert os.path.normpath(place) == str(place)


def test_places_differ_with_the_address_and_not_with_its_spelling():
    assert local_place("https://host/a/x.nwb") != local_place("https://host/b/x.nwb")
    assert local_place("HTTPS://Host:443/x.nwb") == local_place("https://host/x.nwb")
    assert local_place("s3://bucket/X.nwb") != local_place("s3://bucket/x.nwb")
    assert local_place("data/x.nwb") == "data/x.nwb"
