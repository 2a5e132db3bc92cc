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
    training = training_set(polygons=(5, 5, 5), pixels=12)
    project = project_of(training, kind=kind, repeats=1, folds=2, trees=5)
    return fit_model(training, project, recipe_of(project), jobs=jobs)


def test_same_labels_after_reload_and_in_a_fresh_process(tmp_path: Path) -> None:
    features = np.random.default_rng(2).uniform(0, 0.5, (500, 4)).astype(np.float32)
    np.save(tmp_path / "features.npy", features)
    expected = {}
    for kind in KINDS:
        model = fitted(kind)
        save_model(model, tmp_path / kind)
        back = load_model(tmp_path / kind)
        expected[kind], probabilities = back.predict_both(features)
        assert np.array_equal(expected[kind], model.predict(features)), kind
        assert np.array_equal(probabilities, model.probabilities(features)), kind
        assert back.recipe == model.recipe
        assert len(np.unique(expected[kind])) == 3
    # One process for all kinds: starting it takes longer than all that is tested in it.
    code = (
        "import sys, numpy as np; from pathlib import Path; from classify.models import load_model;"
        "f = Path(sys.argv[1]); x = np.load(f / 'features.npy');"
        "[np.save(f / k / 'labels.npy', load_model(f / k).predict(x)) for k in sys.argv[2:]]"
    )
    subprocess.run([sys.executable, "-c", code, str(tmp_path), *KINDS], check=True)
    for kind in KINDS:
        assert np.array_equal(np.load(tmp_path / kind / "labels.npy"), expected[kind]), kind


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


def test_a_forest_whose_trees_are_not_its_own_is_refused(tmp_path: Path) -> None:
    training = training_set(polygons=(4, 4), pixels=10)
    project = project_of(training, repeats=1, folds=2, trees=3, importance=False)
    other = fit_model(training, project, recipe_of(project))
    model = replace(fitted(), estimator=deepcopy(fitted().estimator))
    model.estimator.estimators_[1] = other.estimator.estimators_[1]
    save_model(model, tmp_path)
    with pytest.raises(ModelError, match="not of this forest"):
        load_model(tmp_path)


def spoiled(estimator: Any, part: str, name: str, change: Callable[[Any], Any]) -> Any:
    """A copy in which an attribute of one step of the pipeline is another."""
    copy = deepcopy(estimator)
    setattr(copy.named_steps[part], name, change(getattr(copy.named_steps[part], name)))
    return copy


def put(place: int | tuple[int, ...], value: float) -> Callable[[np.ndarray], np.ndarray]:
    def change(array: np.ndarray) -> np.ndarray:
        array = array.copy()
        array[place] = value
        return array

    return change


FAULTS: dict[str, list[tuple[str, str, Callable[[Any], Any]]]] = {
    "support vector machine": [
        ("machine", "_dual_coef_", lambda a: a[:, :3].copy()),
        ("machine", "_dual_coef_", lambda a: a[:1]),
        ("machine", "_dual_coef_", np.asfortranarray),
        ("machine", "_dual_coef_", lambda a: a.astype(np.float32)),
        ("machine", "_dual_coef_", put((0, 0), np.nan)),
        ("machine", "_dual_coef_", lambda a: a * 2),
        ("machine", "dual_coef_", lambda a: a[:, :-1].copy()),
        ("machine", "_intercept_", lambda a: a[:1]),
        ("machine", "intercept_", put(0, 7)),
        ("machine", "_n_support", put(0, 10_000)),
        ("machine", "_n_support", lambda a: np.array([-1, a[0] + a[1] + 1, a[2]], np.int32)),
        ("machine", "_n_support", lambda a: a[:2]),
        ("machine", "_n_support", lambda a: a.astype(np.int64)),
        ("machine", "support_vectors_", lambda a: a[:2]),
        ("machine", "support_vectors_", lambda a: a[:, :2].copy()),
        ("machine", "support_vectors_", put((1, 1), np.inf)),
        ("machine", "support_", lambda a: a[:1]),
        ("machine", "support_", put(0, -5)),
        ("machine", "support_", put(0, 10**6)),
        ("machine", "_probA", lambda _: np.ones(1)),
        ("machine", "_gamma", lambda _: float("nan")),
        ("machine", "_impl", lambda _: "one_class"),
        ("machine", "_sparse", lambda _: True),
        ("machine", "kernel", lambda _: "precomputed"),
        ("machine", "n_features_in_", lambda _: 3),
        ("scale", "scale_", lambda a: a[:2]),
        ("scale", "scale_", put(1, 0)),
        ("scale", "mean_", put(1, np.nan)),
    ],
    "linear support vector machine": [
        ("machine", "coef_", lambda a: a[:, :2].copy()),
        ("machine", "coef_", lambda a: a[:2]),
        ("machine", "coef_", put((0, 0), np.nan)),
        ("machine", "intercept_", lambda a: a[:1]),
        ("scale", "mean_", lambda a: a.astype(np.float32)),
    ],
}


@pytest.mark.parametrize("kind", list(FAULTS))
def test_a_machine_whose_arrays_do_not_fit_each_other_is_refused(tmp_path: Path, kind: str) -> None:
    """Before it labels a pixel: libsvm believes every array and would read past the end of the others."""
    model = fitted(kind)
    for part, name, change in FAULTS[kind]:
        save_model(replace(model, estimator=spoiled(model.estimator, part, name, change)), tmp_path)
        with pytest.raises(ModelError, match="cannot be used"):
            load_model(tmp_path)
            pytest.fail(f"{name} of {part}, spoiled, was taken")


@pytest.mark.parametrize("kind", KINDS)
def test_a_sound_model_of_two_classes_is_taken(tmp_path: Path, kind: str) -> None:
    """scikit-learn turns signs and drops a plane for two classes."""
    training = training_set(polygons=(4, 4), pixels=10)
    project = project_of(training, kind=kind, repeats=1, folds=2, trees=3, importance=False)
    model = fit_model(training, project, recipe_of(project))
    save_model(model, tmp_path)
    assert np.array_equal(load_model(tmp_path).predict(training.features), model.predict(training.features))


def test_an_estimator_of_another_kind_than_the_card_says_is_refused(tmp_path: Path) -> None:
    model = fitted("support vector machine")
    save_model(replace(model, card={**model.card, "kind": "linear support vector machine"}), tmp_path)
    with pytest.raises(ModelError, match="it is no linear support vector machine"):
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
