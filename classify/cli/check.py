"""`landassay check`: read everything, touch nothing, list every problem."""

from __future__ import annotations

import sys
from collections.abc import Mapping
from typing import Any

import click

from classify.cli.common import Call, common_options
from classify.cli.render import percent, table
from classify.cli.run import run_stages


@click.command("check", help="Read everything, touch nothing, list every problem.")
@click.option("--review", is_flag=True, help="Also review the training polygons, into outputs/training.")
@common_options
def command(call: Call, review: bool) -> None:
    """Check the project; exit with 1 when something must be mended before it can run."""
    from classify.checking import check_project

    if review:
        run_stages(call, ["review"], force=False)
        return
    result = check_project(call.project(), call.jobs, call.progress())
    facts = result.to_json()
    call.show(facts, _text(facts))
    if not call.as_json:
        for problem in result.errors if call.quiet else result.problems:
            click.echo(f"{problem.severity}: {problem}", err=True)
    if result.errors:
        sys.exit(1)


def _text(facts: Mapping[str, Any]) -> str:
    parts = []
    if scene := facts["scene"]:
        size = " x ".join(f"{length:g}" for length in scene["pixel_size_xy"])
        parts.append(f"scene: {scene['rows']} rows x {scene['columns']} columns, pixels of {size}, {scene['crs']}")
        rows = [
            [b["role"], b["file"], str(b["band"]), f"{b['scale']:g}", f"{b['offset']:g}",
             "" if b["wavelength_nm"] is None else f"{b['wavelength_nm']:g}"]
            for b in scene["bands"]
        ]  # fmt: skip
        parts.append(table(["band", "file", "no.", "scale", "offset", "nm"], rows))
    if facts["features"]:
        parts.append("features: " + ", ".join(facts["features"]))
    if facts["training"]:
        rows = [
            [row["class"], str(row["polygons"]), f"{row['pixels']:,}", f"{row['area_m2'] / 10_000:,.1f} ha",
             percent(row["clear_share"])]
            for row in facts["training"]
        ]  # fmt: skip
        parts.append(table(["training", "polygons", "pixels", "area", "clear"], rows))
    if facts["reference"]:
        rows = [[name, f"{count:,}"] for name, count in facts["reference"].items()]
        parts.append(table(["reference sample", "points"], rows))
    return "\n\n".join(parts)
