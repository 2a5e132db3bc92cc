"""Compiled inference against scikit-learn: the same model, the same pixels, the same number of threads."""

from __future__ import annotations

import numpy as np
from measure import alternate, in_threads
from sklearn.ensemble import RandomForestClassifier
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.svm import SVC
from threadpoolctl import threadpool_limits

from classify.models.compiled import compile_estimator

FEATURES, CLASSES = 16, 8


def rows(quick: bool) -> list[dict[str, object]]:
    random = np.random.default_rng(0)
    centres = random.normal(0, 0.85, (CLASSES, FEATURES))

    def noisy(count):
        codes = random.integers(0, CLASSES, count)
        return (centres[codes] + random.normal(0, 1, (count, FEATURES))).astype(np.float32), codes + 1

    def scene(side):
        """Fields of 40 pixels with noise of a fifth of that within a class: neighbours resemble each other."""
        fields = random.integers(0, CLASSES, (-(-side // 40), -(-side // 40)))
        codes = np.kron(fields, np.ones((40, 40), dtype=int))[:side, :side]
        return np.reshape(centres[codes] + random.normal(0, 0.2, (side, side, FEATURES)), (-1, FEATURES)).astype(
            np.float32
        )

    x, y = noisy(3000 if quick else 14_000)
    forest = RandomForestClassifier(200, class_weight="balanced", random_state=0, n_jobs=-1).fit(x, y)
    forest.set_params(n_jobs=None)
    machine = make_pipeline(StandardScaler(), SVC(C=10, class_weight="balanced", break_ties=True))
    machine.fit(x[: 1500 if quick else 6000], y[: 1500 if quick else 6000])
    pixels, side = (2000, 45) if quick else (20_000, 141)
    cases = {"independent pixels": noisy(pixels)[0], "coherent scene": scene(side)}
    found = []
    with threadpool_limits(1):
        for threads in (1, 2):
            for name, work in cases.items():
                found += compare(f"forest, {name}", forest, work, threads, ("predict_proba", "scores"))
                found += compare(f"forest, {name}", forest, work, threads, ("predict", "predict_index"))
            few = cases["independent pixels"][: pixels // 5]
            found += compare("RBF SVM", machine, few, threads, ("decision_function", "scores"))
            found += compare("RBF SVM", machine, few, threads, ("predict", "predict_index"))
    return found


def compare(name, estimator, pixels, threads, methods) -> list[dict[str, object]]:
    compiled = compile_estimator(estimator)
    theirs, ours = getattr(estimator, methods[0]), getattr(compiled, methods[1])
    reference = theirs(pixels)
    result = ours(pixels) if methods[1] == "scores" else estimator.classes_[ours(pixels)]
    if methods[1] == "scores":
        assert np.abs(reference - result).max() < 1e-9
    else:
        assert (reference == result).all()
    parts = np.array_split(pixels, threads)
    seconds = alternate(
        {
            "theirs": lambda: in_threads(lambda i: theirs(parts[i]), threads),
            "ours": lambda: in_threads(lambda i: ours(parts[i]), threads),
        }
    )
    return [
        {
            "work": name, "asked for": methods[0], "threads": threads,
            "scikit-learn pixels/s": len(pixels) / seconds["theirs"],
            "landassay pixels/s": len(pixels) / seconds["ours"],
            "ratio": round(seconds["theirs"] / seconds["ours"], 2),
        }
    ]  # fmt: skip
