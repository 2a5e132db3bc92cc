"""`landassay check`: read everything, touch nothing, list every problem."""

from __future__ import annotations

import sys
from collections.abc import Mapping, Sequence
from itertools import groupby
from typing import Any

import click

from classify.cli.common import Call, common_options, say
from classify.cli.render import percent, table
from classify.cli.run import run_stages


@click.command("check", help="Read everything, touch nothing, list every problem.")
@click.option("--review", is_flag=True, help="Also review the training polygons, into outputs/training.")
@click.option(
    "--indices", is_flag=True, help="List the spectral indices that this scene can compute, and why not others."
)
@common_options
def command(call: Call, review: bool, indices: bool) -> None:
    """Check the project; exit with 1 when something must be mended before it can run."""
    if indices:
        _indices(call)
        return
    from classify.checking import check_project

    result = check_project(call.project(), call.jobs, call.progress())
    facts = result.to_json()
    call.show(facts, _text(facts))
    if not call.as_json:
        for problem in result.errors if call.quiet else result.problems:
            say(f"{problem.severity}: {problem}", err=True)
    if result.errors:
        sys.exit(1)
    if review:
        run_stages(call, ["review"], force=False)


def _indices(call: Call) -> None:
    from classify.checking import check_indices

    rows = check_indices(call.project())
    parts = []
    for group, members in groupby(rows, key=lambda row: row["shows"]):
        lines = [
            f"  {row['name']:<17}{row['title']}" + (f"  ({row['reason']})" if row["reason"] else "") for row in members
        ]
        parts.append("\n".join([f"{group}", *lines]))
    able = sum(not row["reason"] for row in rows)
    parts.append(f"{able} of {len(rows)} indices can be computed; an index in brackets lacks what stands there")
    call.show({"indices": rows}, "\n\n".join(parts))


def _text(facts: Mapping[str, Any]) -> str:
    parts = []
    if scene := facts["scene"]:
        size = " x ".join(f"{length:g}" for length in scene["pixel_size_xy"])
        parts.append(f"scene: {scene['rows']} rows x {scene['columns']} columns, pixels of {size}, {scene['crs']}")
        parts.append(table(["band", "file", "no.", "scale", "offset", "nm"], [_band(band) for band in scene["bands"]]))
    if facts["features"]:
        parts.append("features: " + ", ".join(facts["features"]))
    if facts["training"]:
        header = ["training", "polygons", "pixels", "area", "clear"]
        parts.append(table(header, [_class(row) for row in facts["training"]]))
    if facts["reference"]:
        rows = [[name or "(no label)", f"{count:,}"] for name, count in facts["reference"].items()]
        parts.append(table(["reference sample", "points"], rows))
    return "\n\n".join(parts)


def _band(band: Mapping[str, Any]) -> Sequence[str]:
    wavelength = "" if band["wavelength_nm"] is None else f"{band['wavelength_nm']:g}"
    return [band["role"], band["file"], str(band["band"]), f"{band['scale']:g}", f"{band['offset']:g}", wavelength]


def _class(row: Mapping[str, Any]) -> Sequence[str]:
    area = f"{row['area_m2'] / 10_000:,.1f} ha"
    return [row["class"], str(row["polygons"]), f"{row['pixels']:,}", area, percent(row["clear_share"])]
