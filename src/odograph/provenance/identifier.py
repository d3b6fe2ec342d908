"""Reading the identifier of a record out of a figure or a page, without any drawing library."""

from __future__ import annotations

import re
import zlib
from collections.abc import Iterator
from pathlib import Path

from odograph.errors import InputError

RECORD_KEY = "odograph-record"
LARGEST_TEXT = 1 << 20
_PNG_SIGNATURE = b"\x89PNG\r\n\x1a\n"
_IDENTIFIER = re.compile(rb"record:[0-9a-f]{64}")
_PLACES = {
    ".svg": re.compile(rb"<dc:identifier>\s*(record:[0-9a-f]{64})\s*</dc:identifier>"),
    ".pdf": re.compile(rb"/Keywords\s*\((record:[0-9a-f]{64})\)"),
    ".html": re.compile(rb'<meta name="odograph-record" content="(record:[0-9a-f]{64})">'),
}


def read_record_id(path: str | Path) -> str | None:
    """The identifier of the record that a file carries inside.

    Parameters
    ----------
    path : str or Path
        A PNG (text chunk ``odograph-record``), SVG (Dublin Core identifier), PDF (keywords) or HTML file
        (meta element). The layout of PNG chunks is that of the PNG Specification (W3C), section 5.

    Returns
    -------
    str or None
        ``record:<64 hex digits>``; None when the file carries none or is of another kind.

    Raises
    ------
    InputError
        When the file is missing or a damaged PNG.
    """
    path = Path(path)
    try:
        content = path.read_bytes()
    except OSError as error:
        raise InputError(
            f"the file cannot be read ({error.strerror})",
            file=str(path),
            expected="a figure, table or page made by odograph",
            remedy="check the path",
        ) from error
    if path.suffix.lower() == ".png" or content.startswith(_PNG_SIGNATURE):
        try:
            texts = dict(_png_texts(content))
        except (ValueError, IndexError, zlib.error) as error:
            raise InputError(
                f"a damaged PNG file ({error})",
                file=str(path),
                expected="a PNG file that is whole",
                remedy="make the figure again",
            ) from error
        value = texts.get(RECORD_KEY, "").encode()
        return value.decode() if _IDENTIFIER.fullmatch(value) else None
    place = _PLACES.get(path.suffix.lower())
    found = place.search(content) if place is not None else None
    return found.group(1).decode() if found else None


def _png_texts(content: bytes) -> Iterator[tuple[str, str]]:
    """The text chunks of a PNG file: plain (tEXt), compressed (zTXt) and international (iTXt)."""
    if not content.startswith(_PNG_SIGNATURE):
        raise ValueError("not a PNG file, though its name says so")
    at = len(_PNG_SIGNATURE)
    while at + 12 <= len(content):
        length = int.from_bytes(content[at : at + 4], "big")
        kind, data = content[at + 4 : at + 8], content[at + 8 : at + 8 + length]
        check = content[at + 8 + length : at + 12 + length]
        if len(check) < 4 or zlib.crc32(kind + data).to_bytes(4, "big") != check:
            raise ValueError("a chunk is not what its checksum says")
        key, _, rest = data.partition(b"\0")
        if kind == b"tEXt":
            yield key.decode("latin-1"), rest.decode("latin-1")
        elif kind == b"zTXt":
            yield key.decode("latin-1"), _unpacked(rest[1:]).decode("latin-1")
        elif kind == b"iTXt":
            compressed, text = rest[0] == 1, rest[2:].split(b"\0", 2)[-1]
            yield key.decode("latin-1"), (_unpacked(text) if compressed else text).decode()
        at += 12 + length


def _unpacked(packed: bytes) -> bytes:
    """What was compressed, as far as a text may reach."""
    unpacker = zlib.decompressobj()
    text = unpacker.decompress(packed, LARGEST_TEXT)
    if unpacker.unconsumed_tail:
        raise ValueError(f"a text of more than {LARGEST_TEXT} bytes")
    return text
