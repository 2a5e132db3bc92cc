"""The model file: safe to open. Never a pickle; a closed list of types is checked before anything is built.

`model.skops` is a zip with a JSON description and NumPy arrays. It is rewritten in a canonical form, so that the same
model gives the same bytes on any day and in any process. `model.json` is the card, with the file's SHA-256.
"""

from __future__ import annotations

import hashlib
import io
import json
import math
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import skops.io

from classify.errors import DataError, ModelError
from classify.features.recipe import Recipe
from classify.files import read_json, write_bytes, write_json
from classify.models.card_check import FIX, check_card
from classify.models.reach import Reach
from classify.models.soundness import unsound_parts
from classify.models.trained import TrainedModel

MODEL_FILE, CARD_FILE, REACH_FILE = "model.skops", "model.json", "reach.npz"
_DESCRIPTION = "schema.json"
# How many times its size on disk a model file may have unpacked; a forest's arrays have five to ten times. Small files,
# of which nothing is to fear, may have more.
_MOST_TIMES, _SMALL_BYTES = 200, 1 << 14
_TREE = "sklearn.tree._tree.Tree"
# (loader, type) pairs that our own models are made of. Everything else is refused.
_TRUSTED = {
    ("ObjectNode", "sklearn.ensemble._forest.RandomForestClassifier"),
    ("ObjectNode", "sklearn.tree._classes.DecisionTreeClassifier"),
    ("ObjectNode", "sklearn.pipeline.Pipeline"),
    ("ObjectNode", "sklearn.preprocessing._data.StandardScaler"),
    ("ObjectNode", "sklearn.svm._classes.SVC"),
    ("ObjectNode", "sklearn.svm._classes.LinearSVC"),
    ("TreeNode", _TREE),
    ("NdArrayNode", "numpy.ndarray"),
    ("NdArrayNode", "numpy.float64"),
    ("NdArrayNode", "numpy.int64"),
    ("NdArrayNode", "numpy.int32"),
    ("DictNode", "builtins.dict"),
    ("ListNode", "builtins.list"),
    ("TupleNode", "builtins.tuple"),
    ("JsonNode", "builtins.str"),
    ("TypeNode", "builtins.str"),
    ("TypeNode", "numpy.dtype"),
}  # fmt: skip


def save_model(model: TrainedModel, folder: Path) -> None:
    """Write model.skops, reach.npz and model.json, each crash-safe. Raises OutputError."""
    content = _canonical(skops.io.dumps(model.estimator))
    write_bytes(folder / MODEL_FILE, content)
    hashes = {"model_sha256": hashlib.sha256(content).hexdigest(), "reach_sha256": None}
    if model.reach is not None:
        reach = model.reach.to_bytes()
        write_bytes(folder / REACH_FILE, reach)
        hashes["reach_sha256"] = hashlib.sha256(reach).hexdigest()
    # The card comes last: until it is there, a half-written model does not match its card and is refused.
    write_json(folder / CARD_FILE, {**model.card, **hashes})


def load_model(folder: Path) -> TrainedModel:
    """Read a model that `save_model` wrote. Raises ModelError for anything unsafe, broken or of another schema."""
    file = folder / MODEL_FILE
    try:
        card = read_json(folder / CARD_FILE)
        content = file.read_bytes()
    except DataError as error:
        raise ModelError(error.problems[0].what, where=error.problems[0].where, fix=FIX) from error
    except OSError as error:
        raise ModelError(
            f"the model file cannot be read: {error.strerror}", where=str(file), fix="train first"
        ) from error
    check_card(card, str(folder / CARD_FILE))
    if hashlib.sha256(content).hexdigest() != card["model_sha256"]:
        raise ModelError(
            "the model file is not the one its card describes (its SHA-256 differs)", where=str(file), fix=FIX
        )
    audit(content, str(file))
    try:
        estimator = skops.io.loads(content, trusted=[_TREE])
        recipe = Recipe.from_json(card["recipe"])
        _check_estimator(estimator, card, str(file))
    except ModelError:
        raise
    except Exception as error:  # skops, NumPy and scikit-learn raise many kinds for a damaged file
        raise ModelError(f"the model file is damaged: {error}", where=str(file), fix=FIX) from error
    return TrainedModel(estimator, card, recipe, _load_reach(folder / REACH_FILE, card))


def _load_reach(path: Path, card: dict[str, Any]) -> Reach | None:
    if card.get("reach_sha256") is None:
        return None
    try:
        content = path.read_bytes()
    except OSError as error:
        raise ModelError(
            f"the file of the model's reach cannot be read: {error.strerror}", where=str(path), fix=FIX
        ) from error
    if hashlib.sha256(content).hexdigest() != card["reach_sha256"]:
        raise ModelError(
            "this is not the reach that the card describes (its SHA-256 differs)", where=str(path), fix=FIX
        )
    _refuse_packed(content, str(path))
    return Reach.from_bytes(content, len(card["features"]))


def audit(content: bytes, where: str) -> None:
    """Refuse an unsafe model file before anything in it is built. Raises ModelError naming every foreign type."""
    _refuse_packed(content, where)
    description, names = _opened(content, where)
    foreign = {f"{n.get('__module__')}.{n.get('__class__')}" for n in _nodes(description) if not _is_trusted(n)}
    if foreign:
        raise ModelError(
            f"the model file holds types that no model of ours has: {', '.join(sorted(foreign)[:5])[:500]}",
            where=where,
            fix=FIX,
        )
    strange = [name for name in names if not name.endswith(".npy")]
    if strange:
        raise ModelError(
            f"the model file holds other things than arrays: {', '.join(strange[:5])}", where=where, fix=FIX
        )


def _opened(content: bytes, where: str) -> tuple[Any, list[str]]:
    """The description in a model file, and the names of all else in it."""
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            description = json.loads(archive.read(_DESCRIPTION))
            return description, [name for name in archive.namelist() if name != _DESCRIPTION]
    except Exception as error:  # archives can be broken in many ways, descriptions too
        raise ModelError(
            "this is not a model file (a pickle, perhaps): it is not opened", where=where, fix=FIX
        ) from error


def _refuse_packed(content: bytes, where: str) -> None:
    """Refuse an archive that unpacks to far more than arrays of numbers ever do, or whose arrays claim more than they
    hold: memory would be taken for them."""
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            entries = archive.infolist()
            times = sum(entry.file_size for entry in entries) / (len(content) + _SMALL_BYTES)
            arrays = [entry for entry in entries if entry.filename.endswith(".npy")]
            honest = times > _MOST_TIMES or all(_is_honest(archive, entry) for entry in arrays)
    except Exception as error:  # archives and headers can be broken in many ways
        raise ModelError(f"this is not a model file (a pickle, perhaps): {error}", where=where, fix=FIX) from error
    if times > _MOST_TIMES:
        raise ModelError(f"the file unpacks to {times:.0f} times its size, which no model does", where=where, fix=FIX)
    if not honest:
        raise ModelError("the file holds arrays that are damaged: of another size than they say", where=where, fix=FIX)


def _is_honest(archive: zipfile.ZipFile, entry: zipfile.ZipInfo) -> bool:
    """Whether an array is of numbers and as large as it says."""
    with archive.open(entry) as stream:
        version = np.lib.format.read_magic(stream)
        read = np.lib.format.read_array_header_1_0 if version == (1, 0) else np.lib.format.read_array_header_2_0
        shape, _, dtype = read(stream)
        claimed = math.prod(shape) * dtype.itemsize
        return not dtype.hasobject and claimed == entry.file_size - stream.tell()


def _is_trusted(node: dict[str, Any]) -> bool:
    loader = str(node.get("__loader__"))
    return loader == "CachedNode" or (loader, f"{node.get('__module__')}.{node.get('__class__')}") in _TRUSTED


def _nodes(part: Any) -> Iterator[dict[str, Any]]:  # noqa: ANN401 - any JSON
    """Every described object, in the order of the file. Without recursion: the depth is the file's choice."""
    waiting = [part]
    while waiting:
        item = waiting.pop()
        if isinstance(item, dict):
            if "__loader__" in item or "__class__" in item or "__module__" in item:
                yield item
            waiting.extend(reversed(list(item.values())))
        elif isinstance(item, list):
            waiting.extend(reversed(item))


def _check_estimator(estimator: Any, card: dict[str, Any], where: str) -> None:  # noqa: ANN401
    """What is built must be what the card says, and fit to be handed to compiled code."""
    codes = [entry["code"] for entry in card["classes"]]
    if list(estimator.classes_) != codes or estimator.n_features_in_ != len(card["features"]):
        raise ModelError("model file and card disagree on classes or features", where=where, fix=FIX)
    wrong = list(unsound_parts(estimator, card["kind"], len(card["features"])))
    if wrong:
        raise ModelError(f"the model in the file cannot be used: {'; '.join(wrong)}", where=where, fix=FIX)


def _canonical(content: bytes) -> bytes:
    """The same archive without memory addresses, dates or order of chance: objects numbered as they are listed."""
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        description = json.loads(archive.read(_DESCRIPTION))
        number: dict[int, int] = {}
        arrays: dict[str, bytes] = {}
        # From 1: skops takes an identity of 0 for none.
        for new, node in enumerate(_nodes(description), start=1):
            old = node["__id__"]
            if node["__loader__"] == "CachedNode" or ("file" in node and old in number):
                node["__id__"] = number[old]
            else:
                node["__id__"] = number[old] = new
            if "file" in node:
                name = f"{node['__id__']}.npy"
                arrays[name] = arrays.get(name) or archive.read(node["file"])
                node["file"] = name
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, data in [(_DESCRIPTION, json.dumps(description).encode()), *arrays.items()]:
            info = zipfile.ZipInfo(name, date_time=(1980, 1, 1, 0, 0, 0))
            info.compress_type, info.create_system, info.external_attr = zipfile.ZIP_DEFLATED, 3, 0o600 << 16
            archive.writestr(info, data)
    return buffer.getvalue()
