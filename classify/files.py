"""Files written whole or not at all, and their fingerprints.

Every output goes to a temporary name beside its target, is flushed to disk and then renamed, so that a crash leaves
the old file or the new one. Temporary names hold `TEMPORARY_SUFFIX`; the next writer removes those of a killed one.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import stat
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any
from uuid import uuid4

from classify.errors import DataError, OutputError

TEMPORARY_SUFFIX = ".landassay-part"
_MOST_JSON_BYTES = 256 << 20


@contextmanager
def replacing(target: Path, *failures: type[Exception]) -> Iterator[Path]:
    """A temporary path beside `target`, with the same extension; renamed over it when the context ends well.

    The caller writes the file and closes it inside the context. On any exception the temporary file is removed and
    `target` is untouched. Raises OutputError when the folder or the file cannot be written: on OSError, and on
    `failures`, by which libraries say so.
    """
    temporary = target.with_name(f".{target.stem}.{uuid4().hex[:8]}{TEMPORARY_SUFFIX}{target.suffix}")
    try:
        with write_errors(target, *failures):
            target.parent.mkdir(parents=True, exist_ok=True)
            yield temporary
            _flush(temporary)
            temporary.replace(target)
            flush_folder(target.parent)
    finally:
        with suppress(OSError):
            temporary.unlink(missing_ok=True)


@contextmanager
def write_errors(target: Path, *failures: type[Exception]) -> Iterator[None]:
    """Turn failures to write (OSError and `failures`) into an OutputError about `target`."""
    meant: tuple[type[Exception], ...] = (OSError, *failures)
    try:
        yield
    except meant as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise OutputError(
            f"cannot be written: {reason}", where=str(target), fix="free some space or choose a folder you may write to"
        ) from error


def write_bytes(target: Path, content: bytes) -> None:
    """Write a whole file, crash-safe. Raises OutputError."""
    with replacing(target) as temporary:
        temporary.write_bytes(content)


def write_text(target: Path, content: str) -> None:
    """Write a whole UTF-8 file with \\n line ends, crash-safe. Raises OutputError."""
    write_bytes(target, content.encode("utf-8"))


def write_json(target: Path, content: Mapping[str, Any]) -> None:
    """Write JSON that any program reads: UTF-8, two-space indent, never NaN or Infinity. Raises OutputError."""
    write_text(target, json_text(content))


def json_text(content: Mapping[str, Any]) -> str:
    """The text that `write_json` writes."""
    return json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def read_json(path: Path) -> dict[str, Any]:
    """Read a JSON object, of numbers that are numbers. Raises DataError naming file, line and column."""
    try:
        facts = path.stat()
        if not stat.S_ISREG(facts.st_mode):
            raise DataError("this is not a file", where=str(path))
        if facts.st_size > _MOST_JSON_BYTES:
            raise DataError("this file is far too large for what it should hold", where=str(path))
        content = json.loads(path.read_text(encoding="utf-8-sig"), parse_constant=_no_number, parse_float=_finite)
    except FileNotFoundError as error:
        raise DataError("there is no such file", where=str(path)) from error
    except (ValueError, RecursionError) as error:  # also bytes, numbers and depths that are not taken
        raise DataError(f"this is not valid JSON: {error}", where=str(path)) from error
    except OSError as error:
        raise DataError(f"the file cannot be read: {error.strerror}", where=str(path)) from error
    if not isinstance(content, dict):
        raise DataError("a JSON object is expected at the top", where=str(path))
    return content


def _finite(text: str) -> float:
    value = float(text)
    return value if math.isfinite(value) else _no_number(text)


def _no_number(text: str) -> float:
    raise ValueError(f"{text[:40]} is no number")


def sha256(path: Path) -> str:
    """SHA-256 of a file in hexadecimal, read in pieces. Raises DataError."""
    digest = hashlib.sha256()
    try:
        with path.open("rb") as stream:
            while piece := stream.read(1 << 20):
                digest.update(piece)
    except OSError as error:
        raise DataError(f"the file cannot be read: {error.strerror}", where=str(path)) from error
    return digest.hexdigest()


def remove_leftovers(folder: Path, *, below: bool = False) -> int:
    """Delete temporary files that a killed run left in `folder`, and in all folders below it too. Returns how many."""
    look = folder.rglob if below else folder.glob
    found = [path for path in look(f".*{TEMPORARY_SUFFIX}*") if path.is_file()]
    for path in found:
        path.unlink(missing_ok=True)
    return len(found)


def _flush(path: Path) -> None:
    with path.open("rb+") as stream:
        os.fsync(stream.fileno())


def flush_folder(folder: Path) -> None:
    """See to it that names in a folder are on disk."""
    # Windows cannot open a folder; there the rename itself is durable enough.
    if os.name == "nt":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
