"""Draw, add to and mend the sample of a project: what is in its folder, put together."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path

import geopandas
from shapely.geometry.base import BaseGeometry

from classify.assessment.design import Allocation, Design, PlannedStratum, allocate
from classify.assessment.draw import Draw, DrawOptions, draw_lattice, draw_units, population_of
from classify.assessment.drawn_sample import (
    DrawnSample,
    check_places,
    first_design,
    read_drawn,
    refuse_if_changed,
    refuse_if_drawn,
    refuse_if_open,
    taken_cells,
    with_drawn,
    with_replacement,
    write_first,
    write_more,
)
from classify.assessment.plan import read_planned_sizes
from classify.assessment.population import Population, Scan, scan
from classify.errors import SampleError
from classify.files import sha256
from classify.lock import writing
from classify.progress import SILENT, Progress
from classify.raster.grid import Grid
from classify.settings import Project
from classify.training.polygons import read_polygons


@dataclass(frozen=True, slots=True)
class SampleRequest:
    """What is to be drawn of a project's map.

    points: in all; None for the sizes of plan.json. sizes: points of single strata, which come before the allocation.
    allocation: None for that of the plan, or floor. away_from_training_m: pixels of training polygons and so many
    metres around them are not in the population; None keeps them in. map_file: None for the project's own map.
    """

    options: DrawOptions
    points: int | None = None
    sizes: Mapping[str, int] = field(default_factory=dict)
    allocation: Allocation | None = None
    floor: int = 50
    away_from_training_m: float | None = None
    map_file: Path | None = None


def draw_sample(project: Project, outputs: Path, request: SampleRequest, progress: Progress = SILENT) -> DrawnSample:
    """Draw the sample of a project into outputs/sample/. Raises LandassayError; leaves a sample that is there alone."""
    with _held(outputs, progress):
        folder = outputs / "sample"
        refuse_if_drawn(folder)
        cover = request.map_file or outputs / "map" / "cover.tif"
        population = _population(project, cover, request.options, request.away_from_training_m)
        drawn, allocation = _drawn(folder, population, request, progress)
        margin = request.away_from_training_m
        more = {"allocation": allocation, "away_from_training_m": margin}
        design = first_design(population, drawn, request.options, _map_facts(project, cover), more)
        if margin is not None:
            left_out = design["population"]
            design["notes"].append(
                f"Training polygons and {margin:g} m around them are not in the population: accuracy and areas speak "
                f"of the rest of the map, {left_out['excluded_area_m2'] / 10_000:,.1f} ha "
                f"({left_out['excluded_pixels']:,} pixels) less."
            )
            left_out["classes"] = _class_areas(project, population, request.options, progress)
        return write_first(folder, with_drawn(design, population, drawn), population.grid)


def add_to_sample(
    project: Project, outputs: Path, more: int | Mapping[str, int], jobs: int, progress: Progress = SILENT
) -> DrawnSample:
    """Add points to the project's sample: in all, spread as the points that are there, or by stratum.

    The next keys are drawn from the same map, so that old and new points together are one sample of the same design.
    Raises LandassayError.
    """
    with _held(outputs, progress):
        folder = outputs / "sample"
        before, population = _again(project, outputs, jobs)
        design = before.design
        if design["kind"] == "systematic":
            raise SampleError("a lattice cannot be added to", where=str(folder),
                              fix="draw a new sample with more points, in another folder")  # fmt: skip
        sizes = dict(more) if isinstance(more, Mapping) else _as_before(design["strata"], more)
        options = replace(_options(before, jobs), reserve=0)
        drawn = draw_units(population, lambda _: sizes, max(sizes.values(), default=0), options,
                           taken=taken_cells(design), progress=progress)  # fmt: skip
        return write_more(folder, before, with_drawn(design, population, drawn), population.grid)


def replace_point(project: Project, outputs: Path, point: str, reason: str) -> tuple[DrawnSample, str]:
    """Put the next reserve of its stratum in the place of a point; returns the sample and the reserve's id.

    Raises LandassayError.
    """
    with _held(outputs, SILENT):
        before, population = _again(project, outputs, 1)
        design, fresh = with_replacement(before.design, point, reason)
        return write_more(outputs / "sample", before, design, population.grid), fresh


@contextmanager
def _held(outputs: Path, progress: Progress) -> Iterator[None]:
    """No other process changes the sample meanwhile, nor the map that it is drawn from."""
    with writing(outputs, progress), writing(outputs / "sample", progress):
        yield


def _again(project: Project, outputs: Path, jobs: int) -> tuple[DrawnSample, Population]:
    """The sample as drawn, its map and population, all checked to be what they were."""
    folder = outputs / "sample"
    refuse_if_open(folder)
    before = read_drawn(folder)
    refuse_if_changed(folder, before.design)
    cover = Path(project.path(before.design["map"]["file"]))
    if sha256(cover) != before.design["map"]["sha256"]:
        raise SampleError("this is not the map that the sample was drawn from", where=str(cover),
                          fix="put the old map back; points of another map are another sample")  # fmt: skip
    margin = before.design.get("away_from_training_m")
    population = _population(project, cover, _options(before, jobs), margin)
    check_places(before, population.grid, folder / "points.gpkg")
    return before, population


def _options(before: DrawnSample, jobs: int) -> DrawOptions:
    design = before.design
    return DrawOptions(design["kind"], design["seed"], 0, design["apart_m"], design["unit"]["side_px"], jobs)


def _population(project: Project, cover: Path, options: DrawOptions, margin_m: float | None) -> Population:
    classes = {c.code: c.name for c in project.classes}
    population = population_of(cover, classes, options)
    if margin_m is None:
        return population
    return replace(population, excluded=tuple(_around_training(project, population.grid, margin_m)))


def _around_training(project: Project, grid: Grid, margin_m: float) -> list[BaseGeometry]:
    """Training polygons with a margin in metres, in the grid's CRS; buffered in a zone of their own, where a metre is
    one on the ground to about one part in a thousand."""
    frame = read_polygons(project, grid).frame
    local = frame.geometry.to_crs(frame.estimate_utm_crs())
    grown: geopandas.GeoSeries = local.buffer(margin_m).to_crs(frame.crs)
    return list(grown)


def _class_areas(
    project: Project, population: Population, options: DrawOptions, progress: Progress
) -> list[dict[str, str | int | float]]:
    """Pixels and ground area of each map class within a population that is not the whole map."""
    classes = {c.code: c.name for c in project.classes}
    by_class = replace(population_of(population.path, classes, DrawOptions()), excluded=population.excluded)
    found = scan(by_class, options.seed, 0, jobs=options.jobs, progress=progress)
    return [
        {"name": name, "pixels": pixels, "area_m2": round(area_m2, 1)}
        for name, pixels, area_m2 in zip(by_class.names, found.pixels, found.area_m2, strict=True)
    ]


def _drawn(folder: Path, population: Population, request: SampleRequest, progress: Progress) -> tuple[Draw, str]:
    """The draw, and the name of its allocation."""
    options = request.options
    if options.kind != "stratified random":
        if request.points is None or request.sizes:
            raise SampleError("a sample without strata needs a number of points", fix="give --points")
        if options.kind == "systematic":
            return draw_lattice(population, request.points, options, progress), "lattice"
        total = request.points
        return draw_units(population, lambda _: {population.names[0]: total}, total, options, progress=progress), "none"
    sizes = dict(request.sizes)
    name: str = request.allocation or "floor"
    if request.points is None and not sizes:
        plan = folder / "plan.json"
        if not plan.exists():
            raise SampleError("the number of points is not known", fix="give --points, or run 'landassay plan' first")
        sizes = read_planned_sizes(plan, request.allocation)
        name = f"{request.allocation or 'chosen'}, of plan.json"
    if request.points is None:
        drawn = draw_units(population, lambda _: sizes, max(sizes.values()), options, progress=progress)
        return drawn, name if request.allocation or not request.sizes else "given"
    if request.allocation == "neyman":
        fix = "run 'landassay plan --allocation neyman', then 'landassay draw' without --points"
        raise SampleError("Neyman's allocation needs conjectured accuracies", fix=fix)

    def spread(found: Scan) -> Mapping[str, int]:
        return _allocated(population, found, request)

    return draw_units(population, spread, request.points, options, progress=progress), name


def _allocated(population: Population, found: Scan, request: SampleRequest) -> dict[str, int]:
    assert request.points is not None
    names = [n for n, pixels in zip(population.names, found.pixels, strict=True) if pixels and n not in request.sizes]
    left = request.points - sum(request.sizes.values())
    if not names or left <= 0:
        raise SampleError("the points of single strata leave none for the others", fix="give more --points")
    strata = []
    for name in names:
        place = population.names.index(name)
        room = found.pixels[place] - request.options.reserve
        strata.append(PlannedStratum(name, found.area_m2[place], (1.0,), name, max(room, 0)))
    design = Design(tuple(strata), ("any",))
    sizes = allocate(design, left, request.allocation or "floor", floor=request.floor)
    return {**request.sizes, **dict(zip(names, sizes, strict=True))}


def _as_before(strata: list[Mapping[str, int]], more: int) -> dict[str, int]:
    planned = tuple(PlannedStratum(str(s["stratum"]), float(s["n"]), (1.0,), None) for s in strata if s["n"])
    if more < 2 * len(planned):
        raise SampleError(f"{more} points are too few to spread over {len(planned)} strata",
                          fix="name the strata with --add-to")  # fmt: skip
    sizes = allocate(Design(planned, ("any",)), more, "proportional")
    return {s.name: n for s, n in zip(planned, sizes, strict=True)}


def _map_facts(project: Project, cover: Path) -> dict[str, str]:
    whole = cover.absolute()
    inside = whole.is_relative_to(project.folder)
    return {"file": whole.relative_to(project.folder).as_posix() if inside else str(whole), "sha256": sha256(cover)}
