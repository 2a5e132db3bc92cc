"""Results of the sample project that must not drift, and why they last changed.

python tests/golden.py --reason "..."     runs the sample project and writes tests/data/golden.json anew
"""

from __future__ import annotations

import argparse
import json
import shutil
import tempfile
from datetime import date
from importlib.metadata import version
from pathlib import Path
from typing import Any

import pandas as pd

from classify.report import verify

SAMPLE = Path(__file__).parent.parent / "sample_project"
FILE = Path(__file__).parent / "data" / "golden.json"
# What the pipeline may read; the truth is not among it.
GIVEN = ("project.toml", "training.gpkg", "reference.gpkg", "reference_design.json", "first_map.tif")
# Results follow from these; other minor versions may draw other trees.
_LIBRARIES = ("numpy", "pandas", "rasterio", "scikit-learn", "scipy")


def copy_sample(folder: Path) -> Path:
    """The sample project without the truth, in `folder`."""
    for name in GIVEN:
        shutil.copy(SAMPLE / name, folder)
    shutil.copytree(SAMPLE / "scene", folder / "scene")
    return folder


def versions() -> dict[str, str]:
    """Minor versions of the libraries that results follow from."""
    return {name: ".".join(version(name).split(".")[:2]) for name in _LIBRARIES}


def results(folder: Path) -> dict[str, Any]:
    """What a finished sample project says."""
    outputs = folder / "outputs"
    assessment, model, review = (
        json.loads((outputs / name).read_text(encoding="utf-8"))
        for name in ("assessment/assessment.json", "model/model.json", "training/review.json")
    )
    mapped = pd.read_csv(outputs / "map" / "areas.csv")
    report = verify(outputs / "report")
    return {
        "overall_accuracy": _interval(assessment["overall_accuracy"]),
        "area_ha": {name: _interval(area) for name, area in assessment["area"].items()},
        "mapped_pixels": dict(zip(mapped["name"], mapped["pixels"].tolist(), strict=True)),
        "beyond_reach_pixels": dict(zip(mapped["name"], mapped["beyond_reach_pixels"].tolist(), strict=True)),
        "screening_accuracy": model["screening"]["screening_accuracy"],
        # By rank, so that the order counts.
        "suspects": {str(suspect["rank"]): suspect["polygon"] for suspect in review["suspects"]},
        "report": {"sound": report.sound, "files": report.files, "derived": report.derived, "printed": report.printed},
    }


def _interval(estimate: dict[str, Any]) -> dict[str, float]:
    return {key: estimate[key] for key in ("estimate", "lower", "upper")}


def drift(kept: dict[str, Any], found: dict[str, Any], now: dict[str, str]) -> list[str]:
    """What differs from the results kept. With the minor versions of then: any integer, and numbers by more than one in
    a thousand million. With others, which may draw other trees: whatever is off by more than a twentieth."""
    same = kept["versions"] == now
    expected, given = _flat(kept["results"]), _flat(found)
    if expected.keys() != given.keys():
        return [f"other results are told: {sorted(expected.keys() ^ given.keys())}"]

    def differs(key: str) -> bool:
        was, off = expected[key], abs(given[key] - expected[key])
        if same:
            return off > (1e-9 * was if isinstance(was, float) else 0)
        # Which polygon comes at which rank is not a quantity.
        return off > 0.05 * was and not key.startswith("/suspects")

    return [f"{key}: {expected[key]} is now {given[key]}" for key in expected if differs(key)]


def _flat(content: Any, name: str = "") -> dict[str, float | int]:
    if isinstance(content, dict):
        return {k: v for key, part in content.items() for k, v in _flat(part, f"{name}/{key}").items()}
    return {name: content}


def main() -> None:
    """Run the sample project and write the file anew."""
    from classify.settings import load_project
    from classify.workflow import Job, run

    parser = argparse.ArgumentParser(description=main.__doc__)
    parser.add_argument("--reason", required=True, help="why the results are other ones now")
    reason = parser.parse_args().reason
    before = json.loads(FILE.read_text(encoding="utf-8")) if FILE.exists() else {"reasons": []}
    with tempfile.TemporaryDirectory() as place:
        folder = copy_sample(Path(place))
        run(Job(load_project(folder), jobs=2))
        found = results(folder)
    reasons = [*before["reasons"], {"date": date.today().isoformat(), "reason": reason}]
    content = {"versions": versions(), "reasons": reasons, "results": found}
    FILE.write_text(json.dumps(content, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
