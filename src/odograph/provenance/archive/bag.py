"""BagIt (RFC 8493): a folder whose manifests tell whether anything was lost or changed."""

from __future__ import annotations

import hashlib
import os
import shutil
import zipfile
from collections.abc import Iterable, Mapping
from pathlib import Path

from odograph.errors import InputError

ALGORITHMS = ("sha256", "sha512")
_CHUNK = 1 << 20


def write_bag(
    target: Path, files: Mapping[str, Path], texts: Mapping[str, str], info: Mapping[str, str]
) -> None:
    """Write a bag.

    Parameters
    ----------
    target : Path
        The folder to make; it must not be there.
    files : mapping of str to Path
        Files to copy, by their path in the payload.
    texts : mapping of str to str
        Files to write, by their path in the payload.
    info : mapping of str to str
        Lines of bag-info.txt; Payload-Oxum and Bag-Size are added.
    """
    target.mkdir(parents=True)
    digests: dict[str, dict[str, str]] = {}
    total = 0
    for name in sorted({*files, *texts}):
        place = target / "data" / name
        place.parent.mkdir(parents=True, exist_ok=True)
        size, digests[f"data/{name}"] = (
            _copy(files[name], place) if name in files else _write(texts[name].encode(), place)
        )
        total += size
    tags = {"bagit.txt": "BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"}
    lines = {**info, "Bag-Size": f"{total / 1e6:.1f} MB", "Payload-Oxum": f"{total}.{len(digests)}"}
    tags["bag-info.txt"] = "".join(f"{key}: {value}\n" for key, value in sorted(lines.items()))
    for algorithm in ALGORITHMS:
        tags[f"manifest-{algorithm}.txt"] = _manifest(digests, algorithm)
    of_tags = {name: _write(text.encode(), target / name)[1] for name, text in sorted(tags.items())}
    for algorithm in ALGORITHMS:
        (target / f"tagmanifest-{algorithm}.txt").write_text(_manifest(of_tags, algorithm), encoding="utf-8")


def _copy(source: Path, place: Path) -> tuple[int, dict[str, str]]:
    states, size = [hashlib.new(name) for name in ALGORITHMS], 0
    with source.open("rb") as read, place.open("wb") as write:
        while chunk := read.read(_CHUNK):
            write.write(chunk)
            size += len(chunk)
            for state in states:
                state.update(chunk)
    return size, {name: state.hexdigest() for name, state in zip(ALGORITHMS, states, strict=True)}


def _write(content: bytes, place: Path) -> tuple[int, dict[str, str]]:
    place.write_bytes(content)
    return len(content), {name: hashlib.new(name, content).hexdigest() for name in ALGORITHMS}


def _manifest(digests: Mapping[str, Mapping[str, str]], algorithm: str) -> str:
    return "".join(f"{digests[name][algorithm]}  {_encoded(name)}\n" for name in sorted(digests))


def _encoded(name: str) -> str:
    """A path as manifests hold it: percent signs and line ends are encoded (RFC 8493, section 2.1.3)."""
    return name.replace("%", "%25").replace("\n", "%0A").replace("\r", "%0D")


def _decoded(name: str) -> str:
    return name.replace("%0D", "\r").replace("%0A", "\n").replace("%25", "%")


def bag_problems(bag: Path) -> list[str]:
    """What is wrong with a bag: files missing, added or changed; empty when it is complete and valid.

    Links are named as a problem and never followed, and no manifest leads outside the bag.

    Raises
    ------
    InputError
        The folder is no bag.
    """
    if not (bag / "bagit.txt").is_file() or not (bag / "manifest-sha256.txt").is_file():
        raise InputError(
            "this is no bag",
            file=str(bag),
            expected="a folder with bagit.txt and manifest-sha256.txt",
            remedy="name the folder that was unpacked, or the zip file",
        )
    present, links = _walk(bag)
    problems = [f"{name} is a link" for name in links]
    payload = {name for name in present if name.startswith("data/")}
    for kind in ("manifest", "tagmanifest"):
        for algorithm in ALGORITHMS:
            manifest = f"{kind}-{algorithm}.txt"
            if manifest not in present:
                continue
            listed = _read_manifest(bag / manifest)
            if listed is None:
                problems.append(f"{manifest} cannot be read")
                continue
            for name, digest in sorted(listed.items()):
                if ".." in Path(name).parts or Path(name).is_absolute():
                    problems.append(f"{manifest} names a file outside the bag: {name}")
                elif name not in present:
                    problems.append(f"{name} is missing")
                elif _digest(bag / name, algorithm) != digest:
                    problems.append(f"{name} was changed ({algorithm})")
            if kind == "manifest":
                problems += [f"{name} was added" for name in sorted(payload - set(listed))]
    return list(dict.fromkeys(problems))


def _walk(bag: Path) -> tuple[set[str], list[str]]:
    """Files of a bag and, apart from them, what is no plain file or folder."""
    files, links = set(), []
    for at, folders, names in os.walk(bag):
        for name in sorted([*folders, *names]):
            path = Path(at) / name
            told = path.relative_to(bag).as_posix()
            if path.is_symlink() or not (path.is_file() or path.is_dir()):
                links.append(told)
            elif path.is_file():
                files.add(told)
    return files, sorted(links)


def _read_manifest(path: Path) -> dict[str, str] | None:
    """Digests by path; None when a line is none of a manifest's."""
    found = {}
    try:
        for line in path.read_text(encoding="utf-8").split("\n"):
            if line.strip():
                digest, name = line.rstrip("\r").split(maxsplit=1)
                found[_decoded(name.lstrip("*"))] = digest.lower()
    except (UnicodeDecodeError, ValueError):
        return None
    return found


def _digest(path: Path, algorithm: str) -> str:
    with path.open("rb") as handle:
        return hashlib.file_digest(handle, algorithm).hexdigest()


def zip_bag(bag: Path, target: Path) -> None:
    """Put a bag into one zip file, whose bytes depend on the bag only: stored, in order, without times."""
    with zipfile.ZipFile(target, "w", zipfile.ZIP_STORED, allowZip64=True) as archive:
        for path in sorted(bag.rglob("*"), key=lambda path: path.as_posix()):
            if path.is_file():
                member = zipfile.ZipInfo(f"{bag.name}/{path.relative_to(bag).as_posix()}")
                member.external_attr = 0o644 << 16
                with path.open("rb") as read, archive.open(member, "w", force_zip64=True) as write:
                    shutil.copyfileobj(read, write, _CHUNK)


def total_size(paths: Iterable[Path]) -> int:
    """Bytes of files."""
    return sum(path.stat().st_size for path in paths)
