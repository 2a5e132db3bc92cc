"""run.json: what each stage was made from, so that stale results are known and a result can be repeated.

A stage is up to date when its outputs are there and its fingerprint - input files and results of earlier stages by
SHA-256, the settings it reads, the version of this package - equals the one recorded when it ran.
"""

from __future__ import annotations

import hashlib
import json
import platform
import time
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import Any

from classify import __version__
from classify.errors import DataError, Problem
from classify.files import sha256, write_json
from classify.settings import Project
from classify.shapes import RunRecord, read_shaped

# A file that changed so shortly ago can change again without another time stamp: the coarsest clocks of disks step by
# two seconds.
_CLOCK_STEP_NS = 3 * 10**9
_LIBRARIES = ("numpy", "scipy", "pandas", "scikit-learn", "rasterio", "geopandas", "pyproj", "shapely", "skops")


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What a stage rests on at one moment.

    inputs: files of the user, path as written -> size, time of change, SHA-256. fingerprint: of all that it rests on.
    """

    inputs: Mapping[str, Mapping[str, Any]]
    fingerprint: str

    def digest(self, path: str) -> str | None:
        """SHA-256 of an input; None if it is not there."""
        found = self.inputs.get(path, {}).get("sha256")
        return found if isinstance(found, str) else None


class Record:
    """The run.json of one project, as it was when opened. `add` writes it anew."""

    def __init__(self, project: Project) -> None:
        self._project = project
        self._path = project.folder / "outputs" / "run.json"
        self._content = self._read()

    def _read(self) -> dict[str, Any]:
        if not self._path.is_file():
            return {}
        try:
            return read_shaped(self._path, RunRecord, fix="")
        except DataError:
            # A damaged record only means that every stage counts as stale; it is written anew by the next run.
            return {}

    def fingerprint(self, stage: str) -> str | None:
        """The fingerprint that a stage had when it ran; None if it has not, or left something out."""
        found = self._content.get("stages", {}).get(stage, {}).get("fingerprint")
        return found if isinstance(found, str) else None

    def outputs(self, stage: str) -> tuple[str, ...]:
        """What a stage made when it ran, below outputs/."""
        return tuple(self._content.get("stages", {}).get(stage, {}).get("outputs", {}))

    def altered(self, stage: str) -> str | None:
        """The first thing that a stage made, below outputs/, which is no longer as it was made; None if all are.

        GeoPackages are left out: programs write into them when they merely show them.
        """
        known = self._content.get("results", {})
        for output, digest in self._content.get("stages", {}).get(stage, {}).get("outputs", {}).items():
            if not output.endswith(".gpkg") and self._facts(f"outputs/{output}", known)["sha256"] != digest:
                return str(output)
        return None

    def snapshot(self, sections: Iterable[str], inputs: Iterable[str], results: Iterable[str]) -> Snapshot:
        """What a stage rests on now: parts of the project file, files as written there, results below outputs/."""
        settings = self._project.model_dump(mode="json")
        facts = {written: self._facts(written, self._content.get("inputs", {})) for written in inputs}
        made = {
            result: self._facts(f"outputs/{result}", self._content.get("results", {}))["sha256"] for result in results
        }
        parts = {
            "version": __version__,
            "settings": {name: _section(settings, name) for name in sections},
            "inputs": {written: fact["sha256"] for written, fact in facts.items()},
            "results": made,
        }
        digest = hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()
        return Snapshot(facts, digest)

    def add(
        self, stage: str, before: Snapshot, outputs: Iterable[str], *,
        seconds: float, warnings: Iterable[Problem], whole: bool,
    ) -> None:  # fmt: skip
        """Write that a stage has run. `whole` is False if it left something out: then it stays stale."""
        # Another stage may have been recorded since this object read the file.
        self._content = self._read()
        facts = {output: self._facts(f"outputs/{output}", {}, ours=True) for output in outputs}
        stages = self._content.get("stages", {})
        stages[stage] = {
            "fingerprint": before.fingerprint if whole else None,
            "finished": datetime.now(UTC).isoformat(timespec="seconds"),
            "seconds": round(seconds, 2),
            "outputs": {output: fact["sha256"] for output, fact in facts.items()},
            "warnings": [str(warning) for warning in warnings],
        }
        kept = self._content.get("results", {})
        self._content = {
            "schema": 1,
            "landassay": __version__,
            "project_file": self._project.file.name,
            "seed": self._project.project.seed,
            "settings": self._project.model_dump(mode="json", by_alias=True),
            "versions": {"python": platform.python_version(), **{name: version(name) for name in _LIBRARIES}},
            "system": platform.system(),
            "inputs": {**self._content.get("inputs", {}), **before.inputs},
            "results": {**kept, **{f"outputs/{output}": fact for output, fact in facts.items()}},
            "stages": stages,
        }
        write_json(self._path, self._content)

    def renewed(self, stage: str, output: str) -> None:
        """Write that one of the outputs of a stage was made anew, and rightly."""
        self._content = self._read()
        fact = self._facts(f"outputs/{output}", {}, ours=True)
        self._content["stages"][stage]["outputs"][output] = fact["sha256"]
        self._content["results"][f"outputs/{output}"] = fact
        write_json(self._path, self._content)

    def _facts(self, written: str, known: Mapping[str, Any], *, ours: bool = False) -> dict[str, Any]:
        """Size, time of change and hash of a file; a recorded hash is kept while size and time are the same.

        The time is left out, so that the file is always read again, while it does not tell one content from the next.
        ours: nobody else writes this file. Times are compared for equality only, so that a clock may be set back.
        """
        path = self._project.path(written)
        file = Path(path)
        if path.startswith("/vsi") or "://" in path or not file.is_file():
            # Remote files have no cheap hash: the address stands for the content.
            return {"sha256": None}
        facts = file.stat()
        before: dict[str, Any] = known.get(written, {})
        if before.get("bytes") == facts.st_size and before.get("modified_ns") == facts.st_mtime_ns:
            return before
        if not ours and time.time_ns() - facts.st_mtime_ns < _CLOCK_STEP_NS:
            return {"bytes": facts.st_size, "modified_ns": None, "sha256": sha256(file)}
        digest = _hash_once(file, facts.st_size, facts.st_mtime_ns)
        return {"bytes": facts.st_size, "modified_ns": facts.st_mtime_ns, "sha256": digest}


def _section(settings: Mapping[str, Any], dotted: str) -> Any:  # noqa: ANN401 - any setting
    for key in dotted.split("."):
        settings = settings[key]
    return settings


@cache
def _hash_once(file: Path, size: int, modified_ns: int) -> str:  # size and time are part of the key
    return sha256(file)
