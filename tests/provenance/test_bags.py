"""Bags against the bagit library and sha256sum; hostile zip files are refused by what is wrong with them."""

import stat
import subprocess
import zipfile

import bagit
import pytest

from odograph.errors import InputError
from odograph.provenance.archive.bag import bag_problems, write_bag, zip_bag
from odograph.provenance.archive.unpack import unpack


@pytest.fixture
def bag(tmp_path):
    source = tmp_path / "source.bin"
    source.write_bytes(bytes(range(256)) * 1000)
    target = tmp_path / "bag"
    texts = {"README.md": "read me\n", "a folder/line.txt": "a space\n"}
    write_bag(target, {"results/one.bin": source}, texts, {"External-Identifier": "root:1"})
    return target


def test_a_bag_is_valid_by_bagit_and_by_coreutils(bag):
    """RFC 8493: version 1.0, SHA-256 and SHA-512, checked by the bagit library and by sha256sum -c."""
    assert (bag / "bagit.txt").read_text() == "BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"
    assert bagit.Bag(str(bag)).validate()
    assert "Payload-Oxum: 256016.3\n" in (bag / "bag-info.txt").read_text()
    assert bag_problems(bag) == []
    for manifest in ("manifest-sha256.txt", "tagmanifest-sha256.txt"):
        assert subprocess.run(["sha256sum", "--quiet", "-c", manifest], cwd=bag, check=False).returncode == 0


def test_percent_signs_and_line_ends_in_names_are_encoded(tmp_path):
    # RFC 8493, section 2.1.3.
    write_bag(tmp_path / "bag", {}, {"100 %.txt": "x", "two\nlines.txt": "y"}, {})
    lines = (tmp_path / "bag/manifest-sha512.txt").read_text().splitlines()
    assert [line.split("  ")[1] for line in lines] == ["data/100 %25.txt", "data/two%0Alines.txt"]
    assert bag_problems(tmp_path / "bag") == []


@pytest.mark.parametrize(
    "harm, told",
    [
        (lambda bag: (bag / "data/README.md").write_text("other\n"), "data/README.md was changed"),
        (lambda bag: (bag / "data/results/one.bin").unlink(), "data/results/one.bin is missing"),
        (lambda bag: (bag / "data/new.txt").write_text("new"), "data/new.txt was added"),
        (lambda bag: (bag / "bag-info.txt").write_text("x: y\n"), "bag-info.txt was changed"),
    ],
)
def test_what_is_wrong_with_a_bag_is_named(bag, harm, told):
    harm(bag)
    assert any(told in problem for problem in bag_problems(bag))


def test_a_zip_file_has_the_same_bytes_and_comes_back(bag, tmp_path):
    zip_bag(bag, tmp_path / "one.zip")
    zip_bag(bag, tmp_path / "two.zip")
    assert (tmp_path / "one.zip").read_bytes() == (tmp_path / "two.zip").read_bytes()
    back = unpack(tmp_path / "one.zip", tmp_path / "back")
    assert back.name == "bag" and bag_problems(back) == []
    assert (back / "data/results/one.bin").read_bytes() == (bag / "data/results/one.bin").read_bytes()


def zipped(path, *members, **facts):
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in members:
            member = zipfile.ZipInfo(name)
            member.compress_type = zipfile.ZIP_DEFLATED
            for key, value in facts.items():
                setattr(member, key, value)
            archive.writestr(member, content)
    return path


@pytest.mark.parametrize(
    "members, facts, told",
    [
        ([("../evil.txt", "x")], {}, "leads outside"),
        ([("a/../../evil.txt", "x")], {}, "leads outside"),
        ([("/etc/evil.txt", "x")], {}, "leads outside"),
        ([("C:/evil.txt", "x")], {}, "another place"),
        ([("a\\..\\evil.txt", "x")], {}, "another place"),
        ([("link", "target")], {"external_attr": (stat.S_IFLNK | 0o777) << 16}, "a link or a device"),
        ([("pipe", "")], {"external_attr": (stat.S_IFIFO | 0o666) << 16}, "a link or a device"),
        ([("a.txt", "x"), ("A.txt", "y")], {}, "the same name twice"),
        ([("a", "x"), ("a/b.txt", "y")], {}, "a folder as well"),
        ([("bomb.bin", b"\0" * 50_000_000)], {}, "more bytes than so few"),
    ],
)
def test_hostile_members_are_refused_and_nothing_is_written(tmp_path, members, facts, told):
    source = zipped(tmp_path / "hostile.zip", *members, **facts)
    with pytest.raises(InputError, match=told):
        unpack(source, tmp_path / "inside" / "target")
    assert not list(tmp_path.rglob("evil*"))
    assert not (tmp_path / "inside" / "target").exists()


@pytest.mark.filterwarnings("ignore:Duplicate name")
def test_a_name_that_is_there_twice_is_refused(tmp_path):
    with pytest.raises(InputError, match="twice"):
        unpack(zipped(tmp_path / "twice.zip", ("a.txt", "x"), ("a.txt", "y")), tmp_path / "target")


def test_what_is_no_zip_file_or_damaged_is_said(tmp_path):
    (tmp_path / "no.zip").write_text("no zip file")
    with pytest.raises(InputError, match="cannot be unpacked"):
        unpack(tmp_path / "no.zip", tmp_path / "target")
    whole = zipped(tmp_path / "whole.zip", ("a.txt", "some text that is long enough" * 50)).read_bytes()
    (tmp_path / "cut.zip").write_bytes(whole[:60] + bytes([whole[60] ^ 255]) + whole[61:])
    with pytest.raises(InputError):
        unpack(tmp_path / "cut.zip", tmp_path / "target")
    assert not (tmp_path / "target").exists()


def test_a_bag_with_a_link_is_named(bag, tmp_path):
    (tmp_path / "elsewhere").mkdir()
    (bag / "data/folder").symlink_to(tmp_path / "elsewhere")
    (bag / "data/README.md").unlink()
    (bag / "data/README.md").symlink_to(tmp_path / "source.bin")
    problems = bag_problems(bag)
    assert "data/folder is a link" in problems and "data/README.md is a link" in problems


@pytest.mark.parametrize("content", [b"nodigest\n", b"\xff\xfe\n"])
def test_a_manifest_that_is_none_is_named(bag, content):
    (bag / "manifest-sha512.txt").write_bytes(content)
    assert "manifest-sha512.txt cannot be read" in bag_problems(bag)


def test_a_manifest_that_leads_outside_is_named(bag):
    with (bag / "manifest-sha256.txt").open("a") as manifest:
        manifest.write(f"{'0' * 64}  ../source.bin\n")
    assert any("outside the bag: ../source.bin" in problem for problem in bag_problems(bag))


def test_names_that_a_disk_may_take_for_one_are_refused(tmp_path):
    """An accented letter in one character and in two (Unicode normal forms C and D)."""
    with pytest.raises(InputError, match="twice"):
        unpack(zipped(tmp_path / "same.zip", ("\u00e9.txt", "x"), ("e\u0301.txt", "y")), tmp_path / "target")


def test_many_members_that_swell_together_are_refused(tmp_path):
    # Each stays below the size from which one alone is a bomb.
    members = [(f"{number}.bin", b"\0" * 900_000) for number in range(40)]
    with pytest.raises(InputError, match="more than so few"):
        unpack(zipped(tmp_path / "swell.zip", *members), tmp_path / "target")
    assert not (tmp_path / "target").exists()


def test_a_member_whose_packed_bytes_are_damaged_is_said(tmp_path):
    source = zipped(tmp_path / "whole.zip", ("a.txt", "".join(map(str, range(5000)))))
    content = bytearray(source.read_bytes())
    content[40:60] = b"\xff" * 20
    source.write_bytes(content)
    with pytest.raises(InputError, match="cannot be unpacked"):
        unpack(source, tmp_path / "target")


def test_a_member_that_is_larger_than_it_says_is_refused(tmp_path):
    source = zipped(tmp_path / "liar.zip", ("a.txt", "x" * 1000))
    content = bytearray(source.read_bytes())
    entry = content.index(b"PK\x01\x02")
    # The size before packing, in the central directory (APPNOTE.TXT, section 4.3.12).
    assert int.from_bytes(content[entry + 24 : entry + 28], "little") == 1000
    content[entry + 24 : entry + 28] = (10).to_bytes(4, "little")
    source.write_bytes(content)
    with pytest.raises(InputError):
        unpack(source, tmp_path / "target")
    assert not (tmp_path / "target").exists()
