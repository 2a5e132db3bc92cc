"""The model file: the same model back, the same bytes every time, and nothing unsafe is ever opened."""

from __future__ import annotations

import hashlib
import io
import json
import pickle
import subprocess
import sys
import zipfile
from collections.abc import Callable
from copy import deepcopy
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import joblib
import numpy as np
import pytest
import skops.io
from sklearn.linear_model import LogisticRegression
from training_sets import project_of, recipe_of, training_set

from classify.errors import ModelError
from classify.models import Reach, TrainedModel, fit_model, load_model, save_model

KINDS = ["random forest", "support vector machine", "linear support vector machine"]


@cache
def fitted(kind: str = "random forest", jobs: int = 1) -> TrainedModel:
    training = training_set()
    project = project_of(training, kind=kind, repeats=1, folds=3, trees=8)
    return fit_model(training, project, recipe_of(project), jobs=jobs)


@pytest.mark.parametrize("kind", KINDS)
def test_same_labels_after_reload_and_in_a_fresh_process(tmp_path: Path, kind: str) -> None:
    model = fitted(kind)
    save_model(model, tmp_path)
    features = np.random.default_rng(2).uniform(0, 0.5, (500, 4)).astype(np.float32)
    back = load_model(tmp_path)
    labels, probabilities = back.predict_both(features)
    assert np.array_equal(labels, model.predict(features))
    assert np.array_equal(probabilities, model.probabilities(features))
    assert back.recipe == model.recipe
    np.save(tmp_path / "features.npy", features)
    code = (
        "import sys, numpy as np; from pathlib import Path; from classify.models import load_model;"
        "f = Path(sys.argv[1]); np.save(f / 'labels.npy', load_model(f).predict(np.load(f / 'features.npy')))"
    )
    subprocess.run([sys.executable, "-c", code, str(tmp_path)], check=True)
    assert np.array_equal(np.load(tmp_path / "labels.npy"), labels)
    assert len(np.unique(labels)) == 3


@pytest.mark.parametrize("kind", KINDS)
def test_same_bytes_whatever_the_jobs(tmp_path: Path, kind: str) -> None:
    save_model(fitted(kind, jobs=1), tmp_path / "one")
    save_model(fitted(kind, jobs=3), tmp_path / "three")
    for name in ("model.skops", "model.json", "reach.npz"):
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "three" / name).read_bytes(), name


def replaced(folder: Path, content: bytes) -> None:
    """Put other content into a model's place, with a card that vouches for it."""
    (folder / "model.skops").write_bytes(content)
    card = json.loads((folder / "model.json").read_text())
    card["model_sha256"] = hashlib.sha256(content).hexdigest()
    (folder / "model.json").write_text(json.dumps(card))


class Trap:
    """What a pickle can do when it is opened."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __reduce__(self) -> tuple[Callable[..., Any], tuple[Any, ...]]:
        return exec, (f"open({str(self.path)!r}, 'w').close()",)


def test_pickles_are_refused_before_anything_runs(tmp_path: Path) -> None:
    save_model(fitted(), tmp_path)
    sprung = tmp_path / "sprung"
    buffer = io.BytesIO()
    joblib.dump(Trap(sprung), buffer)
    arrays = io.BytesIO()
    np.save(arrays, np.array([Trap(sprung)], dtype=object), allow_pickle=True)
    packed = io.BytesIO((tmp_path / "model.skops").read_bytes())
    with zipfile.ZipFile(packed, "a") as archive:
        first = next(name for name in archive.namelist() if name.endswith(".npy"))
    hidden = io.BytesIO()
    with zipfile.ZipFile(packed) as source, zipfile.ZipFile(hidden, "w") as target:
        for name in source.namelist():
            target.writestr(name, arrays.getvalue() if name == first else source.read(name))
    for content in (pickle.dumps(Trap(sprung)), buffer.getvalue(), hidden.getvalue()):
        replaced(tmp_path, content)
        with pytest.raises(ModelError, match=r"not a model file|damaged"):
            load_model(tmp_path)
        assert not sprung.exists()
    pickle.loads(pickle.dumps(Trap(sprung)))
    assert sprung.exists(), "the trap must be one that would have gone off"


def with_schema(content: bytes, change: Callable[[dict[str, Any]], None]) -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(content)) as source, zipfile.ZipFile(buffer, "w") as target:
        for name in source.namelist():
            data = source.read(name)
            if name == "schema.json":
                schema = json.loads(data)
                change(schema)
                data = json.dumps(schema).encode()
            target.writestr(name, data)
    return buffer.getvalue()


def test_types_outside_the_closed_list_are_refused(tmp_path: Path) -> None:
    model = fitted("linear support vector machine")
    save_model(model, tmp_path)
    good = (tmp_path / "model.skops").read_bytes()
    other = LogisticRegression().fit(np.eye(4), [0, 1, 0, 1])
    replaced(tmp_path, skops.io.dumps(other))
    with pytest.raises(ModelError, match=r"sklearn\.linear_model\._logistic\.LogisticRegression"):
        load_model(tmp_path)

    def call_system(schema: dict[str, Any]) -> None:
        node = {"__class__": "system", "__module__": "os", "__loader__": "FunctionNode"}
        schema["content"]["content"]["steps"] = {**node, "content": {"module_path": "os", "function": "system"}}

    replaced(tmp_path, with_schema(good, call_system))
    with pytest.raises(ModelError, match=r"os\.system"):
        load_model(tmp_path)

    def wrong_loader(schema: dict[str, Any]) -> None:
        schema["__loader__"] = "MethodNode"

    replaced(tmp_path, with_schema(good, wrong_loader))
    with pytest.raises(ModelError, match=r"sklearn\.pipeline\.Pipeline"):
        load_model(tmp_path)


def test_tampering_is_noticed(tmp_path: Path) -> None:
    save_model(fitted(), tmp_path)
    content = bytearray((tmp_path / "model.skops").read_bytes())
    content[len(content) // 2] ^= 1
    (tmp_path / "model.skops").write_bytes(content)
    with pytest.raises(ModelError, match="SHA-256 differs"):
        load_model(tmp_path)
    replaced(tmp_path, bytes(content))
    with pytest.raises(ModelError, match=r"damaged|not a model file"):
        load_model(tmp_path)


def test_a_tree_that_points_outside_itself_is_refused(tmp_path: Path) -> None:
    model = replace(fitted(), estimator=deepcopy(fitted().estimator))
    state = model.estimator.estimators_[0].tree_.__getstate__()
    state["nodes"]["left_child"][0] = 10**6
    model.estimator.estimators_[0].tree_.__setstate__(state)
    save_model(model, tmp_path)
    with pytest.raises(ModelError, match="points outside itself"):
        load_model(tmp_path)


def test_missing_or_foreign_cards(tmp_path: Path) -> None:
    with pytest.raises(ModelError, match="no such file"):
        load_model(tmp_path)
    save_model(fitted(), tmp_path)
    card = json.loads((tmp_path / "model.json").read_text())
    for key, value, text in (("schema", 2, "schema 2"), ("classes", card["classes"][:2], "disagree on classes")):
        (tmp_path / "model.json").write_text(json.dumps({**card, key: value}))
        with pytest.raises(ModelError, match=text):
            load_model(tmp_path)
    (tmp_path / "model.json").write_text(json.dumps({k: v for k, v in card.items() if k != "recipe"}))
    with pytest.raises(ModelError, match="lacks recipe"):
        load_model(tmp_path)


def test_reach_is_kept_and_guarded(tmp_path: Path) -> None:
    model = fitted()
    assert model.reach is not None
    save_model(model, tmp_path)
    features = np.random.default_rng(2).uniform(-1, 1, (50, 4)).astype(np.float32)
    back = load_model(tmp_path)
    assert back.reach is not None
    assert np.array_equal(back.reach.of(features), model.reach.of(features))
    content = bytearray((tmp_path / "reach.npz").read_bytes())
    (tmp_path / "reach.npz").write_bytes(bytes(content[:-9]))
    with pytest.raises(ModelError, match="SHA-256 differs"):
        load_model(tmp_path)
    with pytest.raises(ModelError, match="reach is damaged"):
        Reach.from_bytes(bytes(content[:-9]), 4)
    with pytest.raises(ModelError, match="reach is damaged"):
        Reach.from_bytes(bytes(content), 5)
    (tmp_path / "reach.npz").unlink()
    with pytest.raises(ModelError, match="cannot be read"):
        load_model(tmp_path)
