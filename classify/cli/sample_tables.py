"""Options of commands that read a reference sample from tables alone, without a project."""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from classify.cli.common import spoken

if TYPE_CHECKING:
    import pandas as pd

    from classify.assessment import AssessmentOptions

_FILE = click.Path(path_type=Path)
_SETTINGS = ("pixel_area", "area_unit", "kind", "confidence_level", "interval", "seed")


@dataclass(frozen=True, slots=True)
class SampleTables:
    """What was said of the tables: files, and how to read and assess them. spoken: options that were given at all."""

    points: Path | None
    strata: Path | None
    out: Path | None
    merge: Path | None
    settings: dict[str, Any]
    spoken: tuple[str, ...]

    def refuse(self) -> None:
        """Raise UsageError if any option was given: a project states all of this in its own file."""
        if self.spoken:
            raise click.UsageError(
                f"{', '.join(self.spoken)}: only with tables; a project says this in its [reference] and [report]"
            )

    def refuse_unused(self, *, matrix: bool = False) -> None:
        """Raise UsageError for options that change nothing about tables (of points, or a matrix)."""
        reasons = {
            "only with a project": ("--project", "--force"),
            "only with --points": ("--unlabelled",) if matrix else (),
            "only with --strata": ("--pixel-area",) if self.strata is None else (),
            "not with --purposive, which gives no intervals":
                ("--interval", "--confidence", "--seed") if self.settings["evidence"] == "purposive sample" else (),
            "only with --interval bootstrap": ("--seed",) if self.settings["interval"] != "bootstrap" else (),
        }  # fmt: skip
        given = (*self.spoken, *spoken(("project_path", "force")))
        for reason, options in reasons.items():
            unused = [option for option in options if option in given]
            if unused:
                raise click.UsageError(f"{', '.join(unused)}: {reason}")

    def files(self, table: Path) -> list[Path]:
        """The files that results come from: `table` and whichever others were named."""
        return [path for path in (table, self.strata, self.merge) if path is not None]

    def require_out(self) -> Path:
        """The folder for results. Raises UsageError where it was not given."""
        if self.out is None:
            raise click.UsageError("--out is needed: the folder that results go to")
        return self.out

    def read(self, table: Path) -> tuple[pd.DataFrame, pd.DataFrame | None, AssessmentOptions]:
        """`table` (of points or of a matrix), the strata if there are any, and the options. Raises LandassayError."""
        from classify.assessment import AssessmentOptions
        from classify.assessment.columns import read_merge
        from classify.assessment.options import TableName
        from classify.tables import read_table

        options = AssessmentOptions(
            **self.settings,
            merge={} if self.merge is None else read_merge(self.merge),
            points=TableName(str(table), 2),
            strata=TableName(str(self.strata), 2),
        )
        strata = None if self.strata is None else read_table(self.strata)
        if strata is not None and "area" in strata.columns and options.pixel_area is not None:
            raise click.UsageError(
                f"--pixel-area: only where strata give pixels, but {self.strata} has a column 'area'"
            )
        return read_table(table), strata, options


def table_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Add the options to a command function, which gets them as one `SampleTables` named `tables`."""

    @click.option("--points", type=_FILE, help="CSV, a row per point.")
    @click.option("--strata", type=_FILE, help="CSV: stratum, area or pixels; optional mapped_as, clusters.")
    @click.option("--out", type=_FILE, help="Folder for the results, where there is no project.")
    @click.option("--merge", type=_FILE, help="CSV: class, counts_as; classes to merge before anything is counted.")
    @click.option("--unlabelled", multiple=True, help="Reference label that means 'could not tell'. Repeatable.")
    @click.option(
        "--pixel-area", type=click.FloatRange(0, min_open=True), help="Area of a pixel, for strata in pixels."
    )
    @click.option("--unit", "area_unit", default="", help="Name of the area unit, for the tables.")
    @click.option("--design", "kind", default=None, help="How points were drawn; default: by the strata.",
                  type=click.Choice(["simple random", "systematic", "stratified", "post-stratified"]))  # fmt: skip
    @click.option("--purposive", is_flag=True, help="The places were chosen, not drawn: no intervals, no areas.")
    @click.option("--confidence", "confidence_level", default=0.95, show_default=True, help="Confidence level.",
                  type=click.FloatRange(0.5, 1, min_open=True, max_open=True))  # fmt: skip
    @click.option("--interval", default="automatic", show_default=True, help="Kind of confidence interval.",
                  type=click.Choice(["automatic", "normal", "wilson", "student", "bootstrap"]))  # fmt: skip
    @click.option("--seed", type=click.IntRange(0), default=0, help="Seed of the bootstrap.")
    @functools.wraps(command)
    def wrapped(*args: Any, **given: Any) -> Any:  # noqa: ANN401
        said = spoken(("points", "strata", "out", "merge", "unlabelled", "purposive", *_SETTINGS))
        files = {name: given.pop(name) for name in ("points", "strata", "out", "merge")}
        evidence = "purposive sample" if given.pop("purposive") else "probability sample"
        settings = {name: given.pop(name) for name in _SETTINGS}
        settings |= {"evidence": evidence, "unlabelled": tuple(given.pop("unlabelled"))}
        return command(*args, tables=SampleTables(**files, settings=settings, spoken=said), **given)

    return wrapped
