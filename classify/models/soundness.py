"""Is an estimator from a file fit to be used? Its arrays are handed to compiled code that trusts their sizes.

A file of trusted types may still hold arrays that do not fit each other; libsvm and the walk through a tree would then
read past their ends. What is checked is what a fit of ours always leaves behind.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from sklearn.ensemble import RandomForestClassifier
from sklearn.pipeline import Pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.svm import SVC, LinearSVC
from sklearn.tree import DecisionTreeClassifier

from classify.settings.model import ModelKind

_MACHINES: dict[ModelKind, type] = {"support vector machine": SVC, "linear support vector machine": LinearSVC}


def unsound_parts(estimator: Any, kind: ModelKind, features: int) -> Iterator[str]:  # noqa: ANN401 - whatever was read
    """What is wrong with a fitted estimator that should be of a kind and take so many features; nothing if it is sound.

    May raise any error if attributes are missing or of another type: that, too, is a damaged file.
    """
    if kind == "random forest":
        yield from _forest(estimator, features) if type(estimator) is RandomForestClassifier else ("it is no forest",)
        return
    types = (StandardScaler, _MACHINES[kind])
    if type(estimator) is not Pipeline or tuple(type(step) for _, step in estimator.steps) != types:
        yield f"it is no {kind}"
        return
    scaler, machine = (step for _, step in estimator.steps)
    yield from _scaler(scaler, features)
    classes = len(machine.classes_)
    if machine.n_features_in_ != features:
        yield "the machine takes another number of features"
    elif kind == "support vector machine":
        yield from _kernel_machine(machine, features, classes)
    else:
        planes = 1 if classes == 2 else classes
        yield from _array(machine, "coef_", np.float64, (planes, features))
        yield from _array(machine, "intercept_", np.float64, (planes,))


def _scaler(scaler: StandardScaler, features: int) -> Iterator[str]:
    wrong = [what for name in ("mean_", "scale_") for what in _array(scaler, name, np.float64, (features,))]
    yield from wrong
    if not wrong and not (scaler.scale_ > 0).all():
        yield "scale_ is not above zero"
    if scaler.n_features_in_ != features or scaler.with_mean is not True or scaler.with_std is not True:
        yield "the scaler is set otherwise than ours"


def _kernel_machine(machine: SVC, features: int, classes: int) -> Iterator[str]:
    """libsvm takes the number of vectors, of classes and of pairs from different arrays and believes each of them."""
    ours = machine.kernel == "rbf" and machine.decision_function_shape == "ovr" and machine.break_ties is True
    # The kind of libsvm machine is an attribute of the class; one of the object would take its place.
    if not ours or machine._sparse is not False or "_impl" in vars(machine):
        yield "the machine is set otherwise than ours"
    if not (isinstance(machine._gamma, float) and np.isfinite(machine._gamma) and machine._gamma > 0):
        yield "_gamma is not above zero"
    vectors, pairs = len(machine.support_vectors_), classes * (classes - 1) // 2
    wanted: dict[str, tuple[type[np.generic], tuple[int, ...]]] = {
        "support_vectors_": (np.float64, (vectors, features)),
        "support_": (np.int32, (vectors,)),
        "_n_support": (np.int32, (classes,)),
        "_dual_coef_": (np.float64, (classes - 1, vectors)),
        "dual_coef_": (np.float64, (classes - 1, vectors)),
        "_intercept_": (np.float64, (pairs,)),
        "intercept_": (np.float64, (pairs,)),
        "_probA": (np.float64, (0,)),
        "_probB": (np.float64, (0,)),
    }
    wrong = [
        what for name, (dtype, shape) in wanted.items() for what in _array(machine, name, dtype, shape, packed=True)
    ]
    yield from wrong
    if wrong:
        return
    if not vectors or (machine._n_support < 0).any() or machine._n_support.sum(dtype=np.int64) != vectors:
        yield "_n_support does not count the support vectors"
    if (machine.support_ < 0).any() or (machine.support_ >= machine.shape_fit_[0]).any():
        yield "support_ points outside the training pixels"
    # scikit-learn keeps both with the sign turned for two classes; our own kernel reads the one, libsvm the other.
    sign = -1 if classes == 2 else 1
    for name, inner in (("dual_coef_", "_dual_coef_"), ("intercept_", "_intercept_")):
        if not np.array_equal(getattr(machine, name), sign * getattr(machine, inner)):
            yield f"{name} and {inner} differ"


def _forest(forest: RandomForestClassifier, features: int) -> Iterator[str]:
    classes = len(forest.classes_)
    if not forest.estimators_ or forest.n_outputs_ != 1 or forest.n_classes_ != classes:
        yield "the forest has no trees or other classes"
    for member in forest.estimators_:
        tree = member.tree_
        alike = type(member) is DecisionTreeClassifier and member.n_features_in_ == tree.n_features == features
        if not alike or member.n_outputs_ != 1 or member.n_classes_ != classes or tree.node_count < 1:
            yield "a tree is not of this forest"
            return
        if tree.value.shape != (tree.node_count, 1, classes) or not np.isfinite(tree.value).all():
            yield "a tree has no share for every class"
            return
        node = np.arange(tree.node_count)
        inner = tree.children_left != -1
        children = np.stack([tree.children_left[inner], tree.children_right[inner]])
        split = tree.feature[inner]
        # Children after their parent: the walk ends.
        inside = (children > node[inner]).all() and (children < tree.node_count).all()
        if not inside or (split < 0).any() or (split >= features).any():
            yield "a tree of the model points outside itself"
            return


def _array(
    holder: object, name: str, dtype: type[np.generic], shape: tuple[int, ...], *, packed: bool = False
) -> Iterator[str]:
    """Is an attribute a finite array of this dtype and shape, and, if `packed`, in one piece row by row?"""
    value = getattr(holder, name, None)
    if type(value) is not np.ndarray or value.dtype != dtype:
        yield f"{name} is no array of {dtype.__name__}"
    elif value.shape != shape:
        yield f"{name} has the shape {value.shape}, not {shape}"
    elif packed and not value.flags.c_contiguous:
        yield f"{name} is not stored row by row"
    elif not np.isfinite(value).all():
        yield f"{name} holds values that are not numbers"
