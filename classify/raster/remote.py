"""Where a document from elsewhere may lead, and how small documents are fetched.

A STAC item is somebody else's file: what it names is read only if it lies in the item's own folder, or at a public
address over https or in object storage. Addresses inside the user's network, other schemes and absolute paths are
refused, as an item could otherwise make this program read what the user never named.
"""

from __future__ import annotations

import http.client
import os
import time
import urllib.error
import urllib.parse
import urllib.request
from functools import lru_cache
from pathlib import Path
from typing import Any

from classify.errors import DataError
from classify.raster.guard import addresses, check_address

_TIMEOUT_S = 20.0
_LANDING_S = 5.0
_MOST_BYTES = 16 << 20
_OBJECT_STORES = {"s3", "gs", "az"}


def resolve(href: str, source: str) -> str:
    """What `href` in the document `source` names: an https or object-store address, or an absolute path.

    Raises DataError if it is forbidden.
    """
    href = href.strip()
    if any(ord(c) < 32 or c in '<>"\\' for c in href) or href.startswith("/vsi"):
        raise _forbidden(href, source)
    if "://" in source:
        href = urllib.parse.urljoin(source, href)
    scheme = urllib.parse.urlsplit(href).scheme.casefold()
    if scheme in _OBJECT_STORES:
        return href
    if scheme == "https":
        _refuse_private(href, source)
        return href
    if scheme or "://" in source:
        raise _forbidden(href, source)
    folder = Path(source).absolute().parent
    path = Path(os.path.normpath(folder / urllib.parse.unquote(href)))
    if not path.is_relative_to(folder):
        raise _forbidden(href, source)
    return str(path)


def _forbidden(href: str, source: str) -> DataError:
    return DataError(
        f"this item leads to {href[:120]!r}, which is outside its own folder and no public https address", where=source,
        fix="if you trust it, write that file into [scene.bands] yourself",
    )  # fmt: skip


def _refuse_private(href: str, source: str) -> None:
    """Refuse hosts of the user's own network, unless the item itself was fetched from there."""
    host = (urllib.parse.urlsplit(href).hostname or "").rstrip(".")
    if "://" in source and host == urllib.parse.urlsplit(source).hostname:
        return
    inner = host.endswith((".localhost", ".local", ".internal", ".lan", ".home.arpa"))
    if "." not in host.strip("[]") and ":" not in host:
        inner = True  # a bare name is found only inside a network
    if inner or not all(address.is_global for address in addresses(host)):
        raise _forbidden(href, source)


def read_local(path: Path) -> bytes:
    """A small document from a file. Raises DataError."""
    try:
        if path.stat().st_size > _MOST_BYTES:
            raise DataError("this file is far too large to describe a scene", where=str(path))
        return path.read_bytes()
    except FileNotFoundError as error:
        raise DataError("there is no such file", where=str(path)) from error
    except OSError as error:
        raise DataError(f"the file cannot be read: {error.strerror}", where=str(path)) from error


class _StayOnHttps(urllib.request.HTTPRedirectHandler):
    """Follows redirects to https addresses outside the user's network only."""

    def redirect_request(self, req: Any, fp: Any, code: Any, msg: Any, headers: Any, newurl: str) -> Any:  # noqa: ANN401, PLR0917
        if not newurl.startswith("https://"):
            raise _forbidden(newurl, req.full_url)
        _refuse_private(newurl, req.full_url)
        return super().redirect_request(req, fp, code, msg, headers, newurl)


class _Watched(urllib.request.HTTPRedirectHandler):
    """Follows redirects to addresses that may be read; from the public network to no other."""

    def redirect_request(self, req: Any, fp: Any, code: Any, msg: Any, headers: Any, newurl: str) -> Any:  # noqa: ANN401, PLR0917
        check_address(newurl, req.full_url)
        if _is_public(req.full_url) and not _is_public(newurl):
            what = f"this address passes its readers on to {newurl[:120]!r}, inside your own network"
            raise DataError(what, where=req.full_url, fix="if you trust it, name that address itself")
        return super().redirect_request(req, fp, code, msg, headers, newurl)


def _is_public(url: str) -> bool:
    return all(address.is_global for address in addresses(urllib.parse.urlsplit(url).hostname or ""))


@lru_cache(maxsize=4096)
def check_landing(url: str) -> None:
    """Refuse an http address of a raster that passes its readers on to where the user did not mean them to go.

    The raster library follows redirects without a word. Whatever else is wrong with the address, it will say itself.
    Raises DataError.
    """
    request = urllib.request.Request(url, method="HEAD", headers={"User-Agent": "GDAL"})
    try:
        urllib.request.build_opener(_Watched).open(request, timeout=_LANDING_S).close()
    except (OSError, http.client.HTTPException, ValueError):
        return


def fetch(url: str) -> bytes:
    """A small document over https. Raises DataError, also when the address does not answer in time."""
    if not url.startswith("https://"):
        raise DataError(
            "items are fetched over https only", where=url, fix="use the https address, or save the item as a file"
        )
    request = urllib.request.Request(url, headers={"Accept": "application/geo+json, application/json"})
    opener = urllib.request.build_opener(_StayOnHttps)
    try:
        with opener.open(request, timeout=_TIMEOUT_S) as answer:
            raw = _read_in_time(answer, time.monotonic() + _TIMEOUT_S)
    except TimeoutError as error:
        raise DataError(
            f"the address did not answer within {_TIMEOUT_S} s", where=url, fix="try again later"
        ) from error
    except (OSError, http.client.HTTPException, ValueError) as error:
        reason = error.reason if isinstance(error, urllib.error.URLError) else error
        if isinstance(reason, TimeoutError):
            reason = f"no answer within {_TIMEOUT_S} s"
        fix = "check the address, your access to it and the network"
        raise DataError(f"the address cannot be reached: {reason}", where=url, fix=fix) from error
    if len(raw) > _MOST_BYTES:
        raise DataError("this document is far too large to describe a scene", where=url)
    return raw


def _read_in_time(answer: http.client.HTTPResponse, deadline: float) -> bytes:
    """At most a little more than allowed, and not for ever from a server that sends a byte at a time."""
    pieces: list[bytes] = []
    while piece := answer.read1(1 << 16):
        pieces.append(piece)
        if time.monotonic() > deadline:
            raise TimeoutError
        if sum(map(len, pieces)) > _MOST_BYTES:
            break
    return b"".join(pieces)
