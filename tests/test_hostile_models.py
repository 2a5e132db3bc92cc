"""Models from strangers: whatever archive or card comes, it is refused as a model, in bounded time and memory, and
nothing of it is built or run. Pickles, foreign types, cycles and arrays that do not fit are in test_models_store."""

from __future__ import annotations

import hashlib
import io
import json
import struct
import time
import tracemalloc
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from test_models_store import fitted, replaced

from classify.errors import DataError, ModelError
from classify.files import read_json
from classify.models import load_model, save_model


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    save_model(fitted(), tmp_path)
    return tmp_path


def refused(folder: Path, most_bytes: int = 40 << 20) -> str:
    tracemalloc.start()
    before = time.monotonic()
    try:
        with pytest.raises(ModelError) as caught:
            load_model(folder)
        assert time.monotonic() - before < 10 and tracemalloc.get_traced_memory()[1] < most_bytes
    finally:
        tracemalloc.stop()
    assert len(str(caught.value)) < 3000
    return str(caught.value)


def members(folder: Path) -> dict[str, bytes]:
    with zipfile.ZipFile(folder / "model.skops") as archive:
        return {name: archive.read(name) for name in archive.namelist()}


def packed(parts: dict[str, bytes] | list[tuple[str, bytes]], kind: int = zipfile.ZIP_DEFLATED) -> bytes:
    held = io.BytesIO()
    with zipfile.ZipFile(held, "w", kind) as archive:
        for name, content in parts.items() if isinstance(parts, dict) else parts:
            archive.writestr(name, content)
    return held.getvalue()


def claiming(shape: tuple[int, ...], dtype: str = "<f8") -> bytes:
    """An array file that claims a shape and holds eight bytes."""
    head = str({"descr": dtype, "fortran_order": False, "shape": shape}).encode().ljust(117) + b"\n"
    return b"\x93NUMPY\x01\x00" + struct.pack("<H", len(head)) + head + bytes(8)


@pytest.mark.parametrize(
    "name", ["../../x.npy", "/tmp/x.npy", "x.py", "model.pkl", "a/b.npy.exe", "C:\\x", "__init__.py"]
)
def test_further_members_are_refused_and_written_nowhere(folder: Path, name: str) -> None:
    before = set(folder.parent.rglob("*"))
    replaced(folder, packed({**members(folder), name: b"import os"}))
    assert ("not a model file" if name.endswith(".npy") else "other things than arrays") in refused(folder)
    assert set(folder.parent.rglob("*")) == before and not Path("/tmp/x.npy").exists()


def test_a_bomb_is_not_unpacked(folder: Path) -> None:
    for name in ("bomb.npy", "schema.json"):
        parts = {**members(folder), name: bytes(60 << 20)}
        replaced(folder, packed(parts))
        del parts
        assert "times its size" in refused(folder)
    save_model(fitted(), folder)
    content = packed({"centre.npy": bytes(60 << 20)})
    (folder / "reach.npz").write_bytes(content)
    card = json.loads((folder / "model.json").read_text())
    card["reach_sha256"] = hashlib.sha256(content).hexdigest()
    (folder / "model.json").write_text(json.dumps(card))
    assert "times its size" in refused(folder)


@pytest.mark.parametrize("shape", [(10**12,), (2**62, 2), (2**63, 2**63), (0, 10**18), (-1,), (10**9, 10**9)])
@pytest.mark.parametrize("dtype", ["<f8", "|O", "<U1000000000", "V99999999999"])
def test_arrays_that_claim_what_they_do_not_hold(folder: Path, shape: tuple[int, ...], dtype: str) -> None:
    parts = members(folder)
    first = next(name for name in parts if name.endswith(".npy"))
    replaced(folder, packed({**parts, first: claiming(shape, dtype)}))
    refused(folder)


def changed_bytes(content: bytes, place: bytes, offset: int, new: bytes) -> bytes:
    """Overwrite bytes `offset` after every occurrence of a mark."""
    held, at = bytearray(content), -1
    while (at := content.find(place, at + 1)) >= 0:
        held[at + offset : at + offset + len(new)] = new
    return bytes(held)


BROKEN: dict[str, Callable[[bytes], bytes]] = {
    "empty": lambda _: b"",
    "no archive": lambda _: b"\x80\x04cos\nsystem\n.",
    "cut off": lambda content: content[: len(content) // 2],
    "encrypted": lambda content: changed_bytes(content, b"PK\x01\x02", 8, b"\x01\x00"),
    "unknown packing": lambda content: changed_bytes(content, b"PK\x01\x02", 10, b"\x63\x00"),
    "wrong sum": lambda content: changed_bytes(content, b"PK\x01\x02", 16, b"\0\0\0\0"),
    "sizes that lie": lambda content: changed_bytes(content, b"PK\x01\x02", 24, b"\xff\xff\xff\x0f"),
    "noise in the middle": lambda content: content[:2000] + bytes(500) + content[2500:],
    "another packing": lambda content: packed({"schema.json": b"{}"}, zipfile.ZIP_LZMA),
}


@pytest.mark.parametrize("kind", BROKEN)
def test_a_broken_archive(folder: Path, kind: str) -> None:
    replaced(folder, BROKEN[kind]((folder / "model.skops").read_bytes()))
    refused(folder)


SCHEMAS: dict[str, Any] = {
    "list": [], "number": 3, "nothing": None,
    "loader is a list": {"__loader__": [1], "__class__": "x", "__module__": "y"},
    "class is a table": {"__loader__": "ObjectNode", "__class__": {"a": 1}, "__module__": "os"},
    "function": {"__loader__": "FunctionNode", "__class__": "system", "__module__": "os", "content": {}},
    "reduce": {"__loader__": "ReduceNode", "__class__": "Popen", "__module__": "subprocess"},
    "method": {"__loader__": "MethodNode", "__class__": "read_text", "__module__": "pathlib.Path"},
    "cached without end": {"__loader__": "CachedNode", "__class__": "x", "__module__": "y", "__id__": 1},
    "many": [{"__loader__": "ObjectNode", "__class__": "x" * 500 + str(i), "__module__": "y"} for i in range(999)],
}  # fmt: skip


@pytest.mark.parametrize("kind", [*SCHEMAS, "deep", "long number"])
def test_a_strange_description(folder: Path, kind: str) -> None:
    texts = {"deep": b'{"a":' * 100_000, "long number": b"9" * 10_000}
    text = texts.get(kind) or json.dumps(SCHEMAS[kind]).encode()
    replaced(folder, packed({**members(folder), "schema.json": text}))
    refused(folder)


def test_a_description_that_leads_to_itself(folder: Path) -> None:
    """A list that holds itself, or an object that is its own attribute."""
    parts = members(folder)
    description = json.loads(parts["schema.json"])
    description["content"] = {"__class__": "dict", "__module__": "builtins", "__loader__": "CachedNode",
                              "__id__": description["__id__"]}  # fmt: skip
    replaced(folder, packed({**parts, "schema.json": json.dumps(description).encode()}))
    refused(folder)


CARDS: dict[str, Any] = {
    "schema": [None, 2, "1", "\x1b[2J" * 100], "kind": [None, "forest", 3, ["random forest"]],
    "needs": [None, "nir", [3], ["nir\x1b[2J"]], "features": [[], None, "abc", ["a"] * 3, [None] * 4],
    "recipe": [None, [], {}, {"schema": 1}], "classes": [
        [], None, [{"code": 1}], [{"code": 0, "name": "a"}], [{"code": 256, "name": "a"}], [{"code": 1.5, "name": "a"}],
        [{"code": 1, "name": "a\u202eb"}], [{"code": i, "name": 5} for i in (1, 2, 3)], {"code": 1}],
    "calibration": [None, {}, {"temperature": 0}, {"temperature": -1}, {"temperature": "hot"}, {"temperature": None}],
    "training": [None, {}, {"quantiles": None}, {"quantiles": {"values": {}}}, {"quantiles": {"values": {"a": []}}}],
    "screening": [None, [], 3], "warnings": [None, "x", [3], ["\x07"]], "versions": [None, [], {"scikit-learn": 1}],
    "model_sha256": [None, "", 3, "x" * 64], "reach_sha256": ["", 3, "../../etc/passwd"],
}  # fmt: skip


@pytest.mark.parametrize("key", CARDS)
def test_a_card_that_is_not_as_cards_are(folder: Path, key: str) -> None:
    card = json.loads((folder / "model.json").read_text())
    for value in CARDS[key]:
        (folder / "model.json").write_text(json.dumps({**card, key: value}))
        assert "\x1b" not in refused(folder).replace("\x1b[2J", "" if key == "schema" else "\x1b")


@pytest.mark.parametrize("number", ["NaN", "Infinity", "-Infinity", "1e400", "-1e999"])
def test_numbers_that_are_none_are_refused_in_any_json(folder: Path, number: str) -> None:
    text = (folder / "model.json").read_text()
    temperature = json.dumps(json.loads(text)["calibration"]["temperature"])
    assert f'"temperature": {temperature}' in text
    (folder / "model.json").write_text(text.replace(f'"temperature": {temperature}', f'"temperature": {number}'))
    assert "no number" in refused(folder)
    with pytest.raises(DataError, match="no number"):
        read_json(folder / "model.json")


@pytest.mark.parametrize(
    "text", ["[" * 100_000, '{"a":' * 100_000, "9" * 5000, '{"a": ' + "9" * 5000 + "}", "\x00", "[]", ""]
)
def test_json_that_no_parser_takes(tmp_path: Path, text: str) -> None:
    (tmp_path / "x.json").write_text(text)
    with pytest.raises(DataError):
        read_json(tmp_path / "x.json")


def test_a_model_of_another_number_of_features_never_reaches_compiled_code(folder: Path) -> None:
    card = json.loads((folder / "model.json").read_text())
    values = card["training"]["quantiles"]["values"]
    card["features"] = [*card["features"], "more"]
    values["more"] = [0.0]
    (folder / "model.json").write_text(json.dumps(card))
    assert "disagree on classes or features" in refused(folder)
