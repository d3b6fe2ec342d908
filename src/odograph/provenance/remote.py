"""A recording on a server, as a storage plugin of the engine shows it: what it looks like, and its bytes.

The plugin gives the connection and its settings (end point, region, credentials, redirects). One look asks
for the headers only; it needs no leave to list what else lies there. No message holds what a library says of
a failure: that may name the address a server sent us on to, with its signature.
"""

from __future__ import annotations

import contextlib
import email.utils
import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from odograph.errors import InputError

# Small, so that a slow line still gives signs of life.
_PIECE = 1 << 16
_MISSING = ("404", "NoSuchKey", "NoSuchBucket", "NotFound")
_FORBIDDEN = ("401", "403", "AccessDenied", "Forbidden", "AllAccessDisabled", "InvalidObjectState")
# Servers that refuse to be asked for the headers only, or signed an address for reading only.
_ASK_BY_READING = (403, 405, 501)
_PERMISSION = "give credentials that may read it by the environment (README, section on object storage)"

Sign = Callable[[int], None]


class RefusedError(InputError):
    """The server answers, and does not give the recording."""


class UnreachableError(InputError):
    """The server cannot give the recording now, and may give it later."""


class SilentError(UnreachableError):
    """The server does not answer, or there is nothing to be let in with: for all that lies there."""


@dataclass(frozen=True)
class Stamp:
    """What a recording looks like on its server; None is what the server does not tell.

    Parameters
    ----------
    size : int or None
        Bytes.
    modified : float or None
        Seconds since 1970, by the server's clock.
    tag : str or None
        The entity tag (RFC 9110, section 8.8.3).
    md5, sha256 : str or None
        Hex digits, where the server vouches for them.
    """

    size: int | None
    modified: float | None
    tag: str | None
    md5: str | None = None
    sha256: str | None = None

    @property
    def tells(self) -> bool:
        """Whether two equal stamps mean equal content."""
        return self.tag is not None or self.modified is not None

    def facts(self) -> list[Any]:
        """What is kept beside a copy, to be compared the next time."""
        return [self.size, self.modified, self.tag]


class Remote(Protocol):
    """A recording on a server."""

    def stamp(self) -> Stamp:
        """What it looks like now; raises RefusedError or UnreachableError."""

    def copy_to(self, path: Path, sign: Sign) -> None:
        """Write its bytes to a file, and call `sign` with the number of every piece's bytes."""


class S3Remote:
    """A recording in object storage.

    Parameters
    ----------
    stored : object
        The storage object of `snakemake-storage-plugin-s3`.
    """

    def __init__(self, stored: Any) -> None:
        # Of what boto3 makes, clients only may be shared by threads.
        self._client = stored.provider.s3c.meta.client
        self._at = {"Bucket": stored.bucket, "Key": stored.key}

    def stamp(self) -> Stamp:
        """The object's headers.

        A tag of 32 hex digits is the MD5 of the content, unless it is encrypted with a key of the user's own
        (Amazon S3 API reference, "Object": ETag); one with a dash is that of an upload in parts.
        """
        with _s3_failures_told():
            head = self._client.head_object(**self._at, ChecksumMode="ENABLED")
        tag = head.get("ETag", "").strip('"') or None
        plain = head.get("ServerSideEncryption", "AES256") == "AES256" and "SSECustomerAlgorithm" not in head
        md5 = tag if tag and plain and re.fullmatch("[0-9a-f]{32}", tag) else None
        modified = head["LastModified"].timestamp() if "LastModified" in head else None
        return Stamp(head["ContentLength"], modified, tag, md5, _sha256_of(head))

    def copy_to(self, path: Path, sign: Sign) -> None:
        """Several parts at once where the object is large."""
        with _s3_failures_told():
            self._client.download_file(self._at["Bucket"], self._at["Key"], str(path), Callback=sign)


def _sha256_of(head: dict[str, Any]) -> str | None:
    """The checksum of the whole object; that of an upload in parts ends in a dash and their number."""
    import base64
    import binascii

    text = head.get("ChecksumSHA256") or ""
    with contextlib.suppress(binascii.Error, ValueError):
        digest = base64.b64decode(text, validate=True)
        return digest.hex() if len(digest) == 32 else None
    return None


class HttpRemote:
    """A recording on a web server.

    Parameters
    ----------
    stored : object
        The storage object of `snakemake-storage-plugin-http`.
    """

    def __init__(self, stored: Any) -> None:
        self._stored = stored

    def stamp(self) -> Stamp:
        """The headers of an answer; its size is unknown when the server packs what it sends."""
        with _http_failures_told():
            with self._stored.httpr(verb="HEAD", stream=True) as answer:
                if answer.status_code not in _ASK_BY_READING:
                    return _http_stamp(answer)
            with self._stored.httpr(verb="GET", stream=True) as answer:
                return _http_stamp(answer)

    def copy_to(self, path: Path, sign: Sign) -> None:
        """One piece after another; the plugin's own way takes an error page for a recording."""
        with _http_failures_told(), self._stored.httpr(verb="GET", stream=True) as answer:
            stamp = _http_stamp(answer)
            had = 0
            with path.open("wb") as file:
                for piece in answer.iter_content(_PIECE):
                    file.write(piece)
                    had += len(piece)
                    sign(len(piece))
        if stamp.size is not None and had != stamp.size:
            raise UnreachableError(
                f"the server sent {had} bytes of {stamp.size}", remedy="run snakemake again"
            )


def _http_stamp(answer: Any) -> Stamp:
    status = answer.status_code
    if status != 200:
        raise _http_failure(status)
    packed = answer.headers.get("Content-Encoding", "identity") != "identity"
    size = answer.headers.get("Content-Length", "")
    date = email.utils.parsedate_tz(answer.headers.get("Last-Modified", ""))
    return Stamp(
        int(size) if size.isdecimal() and not packed else None,
        float(email.utils.mktime_tz(date)) if date else None,
        answer.headers.get("ETag"),
    )


def _http_failure(status: int) -> InputError:
    if status in (404, 410):
        return _missing()
    if status in (401, 403, 407):
        return _forbidden(f"status {status}")
    if status >= 500 or status in (408, 425, 429):
        return UnreachableError(
            f"the server cannot give it now (status {status})", remedy="run snakemake again later"
        )
    return RefusedError(
        f"the server does not give it (status {status})",
        expected="an answer with status 200",
        remedy="correct the address in the sessions table",
    )


def _missing() -> RefusedError:
    return RefusedError(
        "there is nothing at this address",
        expected="an NWB file",
        remedy="correct the address in the sessions table, or put the file there",
    )


def _forbidden(how: str) -> RefusedError:
    return RefusedError(
        f"the server does not allow this to be read ({how})",
        expected="a recording that may be read",
        remedy=_PERMISSION,
    )


@contextlib.contextmanager
def _s3_failures_told() -> Iterator[None]:
    from botocore import exceptions
    from s3transfer.exceptions import S3DownloadFailedError

    try:
        yield
    except exceptions.ClientError as error:
        raise _s3_failure(error.response) from None
    except (exceptions.NoCredentialsError, exceptions.PartialCredentialsError) as error:
        raise SilentError(
            "there are no credentials for object storage, or half of them",
            expected="an access key with its secret key",
            remedy=_PERMISSION,
        ) from error
    except (exceptions.BotoCoreError, S3DownloadFailedError) as error:
        raise _no_answer(error) from None


def _s3_failure(response: dict[str, Any]) -> InputError:
    code = str(response.get("Error", {}).get("Code", ""))
    status = int(response.get("ResponseMetadata", {}).get("HTTPStatusCode", 0))
    told = re.sub(r"[^A-Za-z0-9]", "", code)[:60] or f"status {status}"
    if code in _MISSING or status == 404:
        return _missing()
    if code in ("ExpiredToken", "ExpiredTokenException", "RequestExpired", "TokenRefreshRequired"):
        return SilentError("the credentials for object storage have expired", remedy="renew them")
    if code in _FORBIDDEN or status in (401, 403):
        return _forbidden(told)
    if status >= 500 or code in ("SlowDown", "RequestTimeout", "Throttling"):
        return UnreachableError(f"the server cannot give it now ({told})", remedy="run snakemake again later")
    return RefusedError(
        f"the server does not give it ({told})",
        expected="an object that can be read",
        remedy="see that bucket, key, region and end point are right",
    )


@contextlib.contextmanager
def _http_failures_told() -> Iterator[None]:
    from requests.exceptions import RequestException
    from urllib3.exceptions import HTTPError

    try:
        yield
    except (RequestException, HTTPError) as error:
        raise _no_answer(error) from None


def _no_answer(error: Exception) -> SilentError:
    return SilentError(
        f"the server cannot be reached ({type(error).__name__})",
        expected="an answer",
        remedy="see that the host's name and the network are right, then run snakemake again",
    )
