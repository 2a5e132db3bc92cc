"""Many small scenes with one command: time and peak memory for each scene must not grow with their number."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

from bench_memory import run
from small_project import make_small_project


def rows(quick: bool) -> list[dict[str, object]]:
    counts = (5, 15) if quick else (30, 300)
    found: list[dict[str, object]] = []
    with tempfile.TemporaryDirectory() as place:
        folder = make_small_project(Path(place) / "project")
        run(folder, "train")
        for count in counts:
            listed = Path(place) / f"list_{count}.txt"
            names = [f"scenes_{count}/scene_{number:03d}" for number in range(count)]
            for name in names:
                (Path(place) / name).mkdir(parents=True)
                for file in ("bands.tif", "mask.tif"):
                    os.link(folder / file, Path(place) / name / file)
            listed.write_text("\n".join(names), encoding="utf-8")
            seconds, peak = run(folder, "classify", str(listed), "--out", f"{place}/maps_{count}")
            again, _ = run(folder, "classify", str(listed), "--out", f"{place}/maps_{count}")
            found.append({
                "work": f"landassay classify, a list of {count} scenes", "seconds": seconds,
                "s per scene": seconds / count, "again, all kept, s": again, "peak MiB": peak,
            })  # fmt: skip
    return found
