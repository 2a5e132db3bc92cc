"""Which rasters are opened, and where they may lead: what the user named, in formats that hold pixels, and no further.

A raster can make its reader open others: a virtual raster names its sources, and any GeoTIFF may name a file or address
of overviews in its metadata or bring a document in its side file. Left alone, the raster library follows them to other
folders, to the user's network and to services that hand out credentials, and takes whatever format it finds there.
Here a file's own first bytes decide how it is read, its side files and sources are held to the same rule, virtual
rasters may do nothing but put rasters of their own folder together, and addresses are reached only if written down.
"""

from __future__ import annotations

import ipaddress
import os
import re
import socket
from collections.abc import Iterator
from pathlib import Path, PurePosixPath
from typing import Any
from urllib.parse import urlsplit
from xml.parsers import expat

from classify.errors import DataError

_MARKED = "GeoTIFF, JPEG 2000 or Erdas Imagine"
_FORMATS = f"{_MARKED}, ENVI or EHdr with its header, ASCII grid or SRTM height"

_TIFF = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
_JP2 = (b"\0\0\0\x0cjP  \r\n\x87\n", b"\xffO\xffQ")
_VIRTUAL = b"<VRTDataset"
# Bytes that the raster library looks through for the mark of a virtual raster.
_HEAD_BYTES = 1024
_SIDE_FILES = (".ovr", ".OVR", ".msk", ".MSK")

# How a remote file is read, by its ending, GeoTIFF being the default.
_REMOTE_DRIVERS = {
    ".jp2": "JP2OpenJPEG", ".img": "HFA", ".dat": "ENVI", ".bsq": "ENVI", ".bil": "ENVI", ".bip": "ENVI"
}  # fmt: skip
_SCHEMES = {"https": "/vsicurl/", "http": "/vsicurl/", "s3": "/vsis3/", "gs": "/vsigs/", "az": "/vsiaz/"}
_STORES = ("/vsis3/", "/vsigs/", "/vsiaz/")
_ARCHIVES = ("/vsizip/", "/vsitar/", "/vsigzip/")
# The name under which one cloud's machines reach the service that hands out their credentials.
_METADATA_HOSTS = {"metadata.google.internal", "metadata"}


def is_remote(path: str) -> bool:
    """Whether the raster library reads the path through the network or another virtual file system."""
    return path.startswith("/vsi") or "://" in path


def reachable(path: str) -> str:
    """The one name in the raster library's network file systems that is opened for a path; "" for none."""
    if path.startswith(("/vsicurl/", *_STORES)):
        return path
    scheme, _, rest = path.partition("://")
    system = "" if path.startswith("/vsi") else _SCHEMES.get(scheme.casefold(), "")
    return system + (path if system == "/vsicurl/" else rest) if system else ""


def check_path(path: str) -> None:
    """Refuse what is neither a regular file nor an address that may be read. Raises DataError."""
    if path.startswith(_ARCHIVES):
        inner = path.split("/", 2)[2]
        if inner.startswith("/vsi") or "://" in inner:
            raise _refusal("an archive that is itself remote is not read", path, "download the archive first")
    elif reachable(path).startswith("/vsicurl/"):
        check_address(reachable(path).removeprefix("/vsicurl/"), path)
    elif is_remote(path) and not reachable(path):
        fix = "name a file, an address (https, s3, gs, az), or an archive as /vsizip/ARCHIVE/FILE"
        raise _refusal("this is no address that rasters are read from", path, fix)
    elif not is_remote(path) and not os.path.isfile(path):  # noqa: PTH113 - answers for any text
        if os.path.exists(path):  # noqa: PTH110
            raise _refusal("this is not a file", path, "name the raster itself, not a folder or a device")
        raise _refusal("there is no such file", path, "check the path; it starts from the folder of the project file")


def check_address(url: str, path: str) -> None:
    """An http address as it may be read: without credentials, and not of the service that hands them out."""
    parts = _split(url, path)
    if parts.scheme not in ("http", "https") or not parts.hostname:
        raise _refusal("this is no http address", path, "write it as https://HOST/FILE")
    if parts.username is not None:
        what = "this address holds a user name or password, which would be written into the project's record"
        raise _refusal(what, path.replace(parts.netloc, parts.netloc.rpartition("@")[2]),
                       "leave it out; set GDAL_HTTP_USERPWD or GDAL_HTTP_NETRC_FILE in the environment")  # fmt: skip
    host = parts.hostname.rstrip(".")
    if host in _METADATA_HOSTS or any(address.is_link_local for address in addresses(host)):
        raise _refusal("this address belongs to the machine itself (it hands out credentials), not to a scene", path)
    if PurePosixPath(parts.path).suffix.lower() == ".vrt":
        raise _refusal("a virtual raster is not read from an address, as it leads on to others", path,
                       "name the rasters that it puts together")  # fmt: skip


def _split(url: str, path: str) -> Any:  # noqa: ANN401 - a split address
    try:
        return urlsplit(url)
    except ValueError as error:
        raise _refusal(f"this address cannot be read: {error}", path) from error


def addresses(host: str) -> list[ipaddress.IPv4Address | ipaddress.IPv6Address]:
    """Where a host lies: what its name resolves to, seen through the forms that wrap one address in another.

    Empty for a name that is not known: reading it will say so.
    """
    try:
        found = [host, *(str(one[4][0]).partition("%")[0] for one in socket.getaddrinfo(host, 443))]
    except (OSError, UnicodeError):
        found = [host]
    parsed = []
    for text in found:
        try:
            parsed.append(_unwrapped(ipaddress.ip_address(text)))
        except ValueError:
            continue  # a name
    return parsed


_NAT64 = ipaddress.ip_network("64:ff9b::/96")


def _unwrapped(
    address: ipaddress.IPv4Address | ipaddress.IPv6Address,
) -> ipaddress.IPv4Address | ipaddress.IPv6Address:
    if isinstance(address, ipaddress.IPv6Address):
        inner = address.ipv4_mapped or address.sixtofour or (address.teredo[1] if address.teredo else None)
        if address in _NAT64:
            inner = ipaddress.IPv4Address(int(address) & 0xFFFFFFFF)
        return inner or address
    return address


def leads_to(path: str) -> list[str]:
    """Rasters that are opened with a local one: overviews and masks beside it, and the sources of a virtual raster.

    Sources lie in the virtual raster's folder or below. Raises DataError for one that names others, or does anything
    but put them together.
    """
    if is_remote(path):
        return []
    beside = [path + ending for ending in _SIDE_FILES if Path(path + ending).is_file()]
    sources = dict.fromkeys(_virtual_sources(Path(path))) if _is_virtual(_head(Path(path))) else ()
    return [*beside, *sources]


def driver_of(path: str, *, led_to: bool = False) -> str:
    """The one driver that a raster is opened with. Raises DataError for a format that is not read.

    led_to: the raster is opened by way of another, where the raster library chooses by the file's own mark alone.
    """
    if is_remote(path):
        return _REMOTE_DRIVERS.get(PurePosixPath(path.partition("?")[0]).suffix.lower(), "GTiff")
    head = _head(Path(path))
    driver = "VRT" if _is_virtual(head) else _by_mark(head)
    if driver is None and not led_to:
        driver = _by_neighbour(Path(path), head)
    if driver is None:
        raise _refusal(
            "this is no raster of a format that is read", path, f"save it as {_MARKED if led_to else _FORMATS}"
        )
    return driver


def _is_virtual(head: bytes) -> bool:
    return _VIRTUAL in head.partition(b"\0")[0]


def _by_mark(head: bytes) -> str | None:
    if head.startswith(_TIFF):
        return "GTiff"
    if head.startswith(_JP2):
        return "JP2OpenJPEG"
    return "HFA" if head.startswith(b"EHFA_HEADER_TAG") else None


def _by_neighbour(path: Path, head: bytes) -> str | None:
    """Formats without a mark of their own: by the header beside the data, by their first word, by their name."""
    if head[:6].lower().startswith(b"ncols"):
        return "AAIGrid"
    if path.suffix.lower() == ".hgt":
        return "SRTMHGT"
    for header in (path.with_suffix(".hdr"), path.with_suffix(".HDR"), path.with_name(path.name + ".hdr")):
        if header.is_file() and header != path:
            return "ENVI" if _head(header).lstrip().startswith(b"ENVI") else "EHdr"
    return None


def _head(path: Path) -> bytes:
    try:
        with path.open("rb") as stream:
            return stream.read(_HEAD_BYTES)
    except OSError as error:
        raise _refusal(f"the file cannot be read: {error.strerror}", str(path), "check your rights to it") from error


# --- virtual rasters ------------------------------------------------------------------------------------------------

_MOST_BYTES = 8 << 20
# All that a virtual raster needs to put rasters together. What is not listed may compute, warp, or open something.
_ELEMENTS = re.compile(
    "VRTDataset|SRS|GeoTransform|Metadata|MDI|VRTRasterBand|ColorInterp|NoDataValue|HideNoDataValue|Description|"
    "UnitType|Offset|Scale|CategoryNames|Category|ColorTable|Entry|Histograms|HistItem|HistMin|HistMax|BucketCount|"
    "IncludeOutOfRange|Approximate|HistCounts|SimpleSource|ComplexSource|AveragedSource|SourceFilename|SourceBand|"
    "SourceProperties|SrcRect|DstRect|NODATA|ScaleOffset|ScaleRatio|UseMaskBand|MaskBand|BlockXSize|BlockYSize|"
    "OverviewList|GDALRasterAttributeTable|FieldDefn|Name|Type|Usage|Row|F"
)
_ATTRIBUTES = re.compile(
    "rasterXSize|rasterYSize|dataType|band|subClass|blockXSize|blockYSize|relativeToVRT|shared|domain|key|format|"
    "resampling|RasterXSize|RasterYSize|DataType|BlockXSize|BlockYSize|[xy]Off|[xy]Size|dataAxisToSRSAxisMapping|"
    "coordinateEpoch|c[1-4]|index|tableType|Row0Min|BinSize"
)


def _virtual_sources(path: Path) -> Iterator[str]:
    if path.stat().st_size > _MOST_BYTES:
        raise _refusal("this virtual raster is far too large", str(path), "name the rasters themselves")
    try:
        text = path.read_bytes()
    except OSError as error:
        raise _refusal(f"the file cannot be read: {error.strerror}", str(path)) from error
    fix = "write it out as a GeoTIFF, or name the rasters themselves"
    if b"<!" in text or text.count(b"<?") > text.lstrip().startswith(b"<?xml"):
        raise _refusal("this virtual raster holds more than a list of rasters (comments, entities)", str(path), fix)
    folder = path.absolute().parent
    for relative, name in _named_files(text, path, fix):
        source = (folder if relative else Path()) / name
        plain = not re.search(r"[:<\0]", re.sub(r"^[A-Za-z]:[\\/]", "", name))
        inside = source.resolve().is_relative_to(folder.resolve())
        if not plain or not inside or name.startswith("/vsi") or not source.is_file():
            what = f"this virtual raster leads to {name[:120]!r}, which is no file in its own folder"
            raise _refusal(what, str(path), "if you trust it, name that file itself, or " + fix)
        yield str(source)


def _named_files(text: bytes, path: Path, fix: str) -> list[tuple[bool, str]]:
    """(relative to the virtual raster, name) of each file named. Raises DataError for anything but a plain list."""
    named: list[tuple[bool, str]] = []
    within: list[str] = []

    def refuse(what: str) -> DataError:
        return _refusal(f"this virtual raster does more than put rasters together: {what}", str(path), fix)

    def start(name: str, attributes: dict[str, str]) -> None:
        within.append(name)
        if not _ELEMENTS.fullmatch(name) or len(within) > 20:
            raise refuse(f"it holds <{name[:40]}>")
        if strange := [attribute for attribute in attributes if not _ATTRIBUTES.fullmatch(attribute)]:
            raise refuse(f"<{name}> has {strange[0][:40]}")
        if attributes.get("subClass", "VRTSourcedRasterBand") != "VRTSourcedRasterBand":
            raise refuse(f"its parts are of the kind {attributes['subClass'][:40]}")
        if name == "SourceFilename":
            named.append((attributes.get("relativeToVRT", "0") == "1", ""))

    def end(_: str) -> None:
        within.pop()

    def characters(data: str) -> None:
        if within[-1] == "SourceFilename":
            named[-1] = named[-1][0], named[-1][1] + data

    parser = expat.ParserCreate()
    parser.StartElementHandler, parser.EndElementHandler, parser.CharacterDataHandler = start, end, characters
    try:
        parser.Parse(text, True)
    except expat.ExpatError as error:
        raise _refusal(f"this virtual raster cannot be read: {error}", str(path), fix) from error
    return named


def _refusal(what: str, where: str, fix: str = "") -> DataError:
    return DataError(what, where=where, fix=fix)
