"""The errors a user can meet, each with the five facts that let them be mended."""

from __future__ import annotations

import re

# The two blocks of control characters, and the marks that turn the direction of writing.
_CONTROL = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069]")


def printable(text: str) -> str:
    """Text from a file as it can be shown and kept anywhere.

    Control characters other than line ends and tabs would reach the terminal, and bytes that were no UTF-8
    could not be written again; both become their escapes.
    """
    if text.isascii() and text.isprintable():
        return text
    text = text.encode("utf-8", "backslashreplace").decode()
    return _CONTROL.sub(lambda match: ascii(match.group())[1:-1], text)


class OdographError(Exception):
    """An expected failure, told in one message.

    Parameters
    ----------
    found : str
        What was found; the only fact that is always there.
    file : str, optional
        The file it was found in.
    place : str, optional
        The place in that file (an NWB object path, a line, a settings key).
    expected : str, optional
        What should have been there.
    remedy : str, optional
        What the user can do about it.
    """

    def __init__(
        self,
        found: str,
        *,
        file: str | None = None,
        place: str | None = None,
        expected: str | None = None,
        remedy: str | None = None,
    ) -> None:
        self.found = printable(found)
        self.file = printable(str(file)) if file is not None else None
        self.place = printable(place) if place is not None else None
        self.expected = printable(expected) if expected is not None else None
        self.remedy = printable(remedy) if remedy is not None else None
        super().__init__(self.message())

    def message(self) -> str:
        """The five facts as lines of text, those that are known."""
        where = ", ".join(part for part in (self.file, self.place) if part)
        lines = [f"{where}: {self.found}" if where else self.found]
        if self.expected:
            lines.append(f"  expected: {self.expected}")
        if self.remedy:
            lines.append(f"  what to do: {self.remedy}")
        return "\n".join(lines)

    def finding(self) -> dict[str, str | None]:
        """The same facts as a `fail` finding for a session's verdict."""
        return {
            "level": "fail",
            "place": self.place,
            "found": self.found,
            "expected": self.expected,
            "remedy": self.remedy,
        }


class InputError(OdographError):
    """A recording or a table cannot be used as it is."""


class SettingsError(OdographError):
    """A setting is unknown, out of range or contradicts another."""


class ChangedInputError(OdographError):
    """An input is no longer what it was when the run was planned."""


class RecordError(OdographError):
    """A record is missing, damaged or contradicts its products."""


class DiskFullError(OdographError):
    """There is no room for a file."""


class DamagedError(OdographError):
    """A product of another job is not what its record says, or its record cannot be read."""
