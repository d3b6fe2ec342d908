"""Addresses of recordings that lie in object storage or on a web server, and what may stand in them.

An address goes into records, plan files, logs and archives. One that carries a secret is refused where it is
read, before it can reach any of them.
"""

from __future__ import annotations

import re
from urllib.parse import parse_qsl, urlsplit

SCHEMES = ("s3", "http", "https")
# `c:/data` and `c:\data` are paths; every scheme of use has more than one letter.
_LOOKS_LIKE = re.compile(r"[A-Za-z][A-Za-z0-9+.-]+:/{1,}[^/]?")
# What an address may ask for besides its path. All else may be a key to the door.
_HARMLESS = {"download", "dl", "raw", "version", "versionid"}
_HARMLESS_VALUE = re.compile(r"[A-Za-z0-9._-]{0,64}")
_HIDDEN = "..."


def is_address(text: object) -> bool:
    """Whether a recording is named by an address that can be fetched from, not by a path."""
    return isinstance(text, str) and text.partition("://")[0].lower() in SCHEMES and "://" in text


def looks_like_address(text: str) -> bool:
    """Whether a text is meant as an address, of whatever kind."""
    return _LOOKS_LIKE.match(text) is not None


def address_fault(text: str) -> tuple[str, str] | None:
    """What is wrong with an address, and what to do; None when it can be used.

    Parameters
    ----------
    text : str
        What the sessions table says; `looks_like_address` holds.

    Returns
    -------
    tuple of (str, str) or None
        The fault, and the remedy; neither tells a secret.
    """
    told = without_secrets(text)
    if not is_address(text):
        return (
            f"an address of a kind that cannot be fetched: {told}",
            "write s3://BUCKET/KEY.nwb or https://HOST/PATH.nwb, or the path of a file",
        )
    # A password with a slash in it ends what counts as the host.
    server = re.split("[/?#]", text.partition("://")[2])[0]
    if "@" in server or ("@" in text and ":" in server):
        return (
            f"an address with a user's name or a password in it: {told}",
            "take them out, change the password if others could read this table, and give credentials by "
            "the environment (README, section on object storage)",
        )
    try:
        parts = urlsplit(text)
        host, _ = parts.hostname, parts.port
    except ValueError:
        return f"an address that cannot be read: {told}", "write s3://BUCKET/KEY.nwb or https://HOST/PATH.nwb"
    if parts.fragment or _has_more_than_harmless(text, parts.scheme.lower()):
        return (
            f"an address with more than a path in it, such as a signature or a token: {told}",
            "write the address up to the question mark, and give credentials by the environment (README, "
            "section on object storage)",
        )
    segments = parts.path.split("/")[1:]
    if not host or not any(segments) or (parts.scheme.lower() == "s3" and not segments[-1]):
        return f"an address without a file: {told}", "write s3://BUCKET/KEY.nwb or https://HOST/PATH.nwb"
    if any(segment in ("", ".", "..") for segment in segments[:-1]) or segments[-1] in (".", ".."):
        return f"an address with empty or dotted parts in its path: {told}", "write its path out in full"
    return None


def same_address(text: str) -> str:
    """The one spelling of an address: two that differ in the case of scheme and host only are the same."""
    parts = urlsplit(text)
    host = parts.netloc.lower()
    scheme = parts.scheme.lower()
    standard = {"http": ":80", "https": ":443"}.get(scheme)
    if standard and host.endswith(standard):
        host = host.removesuffix(standard)
    return f"{scheme}://{host}{parts.path}" + (f"?{parts.query}" if parts.query else "")


def without_secrets(text: str) -> str:
    """A text in which addresses have lost their user, password, query and fragment: it can be shown."""
    # A secret key may hold slashes: all up to the last @ goes.
    text = re.sub(r"(:/+)\S*@", rf"\1{_HIDDEN}@", text)
    return re.sub(r"(:/[^\s?#;]*)[?#;]\S*", rf"\1?{_HIDDEN}", text)


def _has_more_than_harmless(text: str, scheme: str) -> bool:
    if "?" not in text and ";" not in text:
        return False
    if scheme == "s3" or ";" in text:
        return True
    asked = parse_qsl(urlsplit(text).query, keep_blank_values=True)
    return not asked or any(
        name.lower() not in _HARMLESS or not _HARMLESS_VALUE.fullmatch(value) for name, value in asked
    )
