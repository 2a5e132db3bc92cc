"""Draw a reference sample: stratified random, simple random (of pixels or of square segments), or systematic.

The unit is the pixel, drawn with probability proportional to its ground area, so that the mean over a stratum's points
estimates a share of its area (see `lots` for how); a segment is drawn with that of the mean pixel in it, for then each
of its pixels is. A systematic sample is a square lattice with a random start in an
equal-area projection; its variance is estimated as if it were simple random, which tends to overstate it (common
practice; Cochran 1977, chapter 8).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal, get_args

import geopandas
import numpy as np
import pyproj
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from classify.assessment.lots import lots, stream
from classify.assessment.population import Population, Scan, open_map, scan, segments_across
from classify.errors import Problem, SampleError, raise_if_errors
from classify.progress import SILENT, Progress
from classify.raster.grid import Grid, Window

DrawKind = Literal["stratified random", "simple random", "systematic"]
DRAW_KINDS: tuple[DrawKind, ...] = get_args(DrawKind)
WHOLE_MAP = "whole map"
# Purposes of lots other than the keys of pixels.
IDS, START = 2, 3
# Keys kept at most per stratum while places that keep their distance are looked for.
_MOST_KEYS = 400_000
Cells = tuple[int, int]


@dataclass(frozen=True, slots=True)
class DrawOptions:
    """How to draw.

    reserve: reserve points per stratum, for places that cannot be reached. apart_m: least ground distance between
    points, 0 for none. segment_px: side of the square of pixels drawn as one unit; 1 draws pixels.
    """

    kind: DrawKind = "stratified random"
    seed: int = 0
    reserve: int = 0
    apart_m: float = 0.0
    segment_px: int = 1
    jobs: int = 1


@dataclass(frozen=True, slots=True)
class Drawn:
    """Units drawn of one stratum, in the order of their keys; reserves come after them in the same order.

    units and reserves: (row, col) of pixels, or of segments counted in segments.
    """

    stratum: str
    units: tuple[Cells, ...]
    reserves: tuple[Cells, ...] = ()


@dataclass(frozen=True, slots=True)
class Draw:
    """What a draw gave: the population as counted, and the units by stratum. notes: what a reader of the design must
    know of how it was drawn."""

    scan: Scan
    strata: tuple[Drawn, ...]
    notes: tuple[str, ...] = field(default=())


def population_of(
    path: Path, classes: Mapping[int, str], options: DrawOptions, excluded: Sequence[BaseGeometry] = ()
) -> Population:
    """The pixels of a map that can be drawn. classes: name by code; strata for a stratified draw. Raises DataError,
    SampleError."""
    stratum_of = np.full(256, -1, dtype=np.int16)
    single = options.kind != "stratified random"
    for place, code in enumerate(classes):
        stratum_of[code] = 0 if single else place
    names = (WHOLE_MAP,) if single else tuple(classes.values())
    with open_map(path) as source:
        grid = Grid(source.crs, source.transform, source.height, source.width)
    return Population(path, grid, names, stratum_of, tuple(excluded), options.segment_px)


def check_options(options: DrawOptions) -> None:
    """Raise SampleError listing what does not go together."""
    problems = []
    if options.segment_px > 1 and options.kind != "simple random":
        problems.append(Problem("segments are drawn by simple random sampling only", fix="use --kind simple"))
    if options.segment_px > 1 and options.reserve:
        problems.append(Problem("segments have no reserve", fix="leave out --reserve; add segments later with --add"))
    if options.kind == "systematic" and (options.apart_m or options.reserve):
        problems.append(Problem("a systematic sample has its own distance and no reserve points",
                                fix="leave out --apart and --reserve"))  # fmt: skip
    raise_if_errors(problems, SampleError)


def draw_units(
    population: Population, sizes_of: Callable[[Scan], Mapping[str, int]], most: int, options: DrawOptions,
    *, taken: Mapping[str, Sequence[Cells]] | None = None, progress: Progress = SILENT,
) -> Draw:  # fmt: skip
    """Draw units by stratum, and reserves for each stratum that is drawn from, in one pass over the map.

    sizes_of: says from the counted population how many units of each stratum are wanted (0 or absent: none), at most
    `most` in one. taken: units already drawn by stratum, which are passed over and kept away from. More passes follow
    only where points have to keep a distance. Raises SampleError when a stratum cannot give as many.
    """
    check_options(options)
    taken = taken or {}
    already = max((len(units) for units in taken.values()), default=0)
    keep = already + most + options.reserve
    keep = 4 * keep + 200 if options.apart_m else keep
    while True:
        found = scan(population, options.seed, keep, jobs=options.jobs, progress=progress)
        _not_empty(population, found)
        sizes = sizes_of(found)
        _enough_units(population, found, sizes, options)
        drawn, short = _choose(population, found, sizes, options, taken)
        if not short:
            return Draw(found, tuple(drawn), _notes(options))
        if all(len(found.lowest[place].units) == found.units[place] for place in short) or keep >= _MOST_KEYS:
            raise_if_errors([_no_room(population, place, short, sizes, options) for place in short], SampleError)
        keep = min(8 * keep, _MOST_KEYS)


def _not_empty(population: Population, found: Scan) -> None:
    if not sum(found.pixels):
        raise SampleError("the map has no pixel to draw from", where=str(population.path),
                          fix="check the map, and the buffer around training polygons")  # fmt: skip


def _enough_units(population: Population, found: Scan, sizes: Mapping[str, int], options: DrawOptions) -> None:
    problems = []
    unit = "pixels" if options.segment_px == 1 else "segments"
    for name, size in sizes.items():
        if name not in population.names:
            problems.append(Problem(f"there is no stratum {name!r}", fix=f"strata: {', '.join(population.names)}"))
            continue
        there = found.units[population.names.index(name)]
        if size and not there:
            problems.append(Problem(f"stratum {name!r} has no {unit} on the map", str(population.path),
                                    "leave it out of the sample, or merge it with another"))  # fmt: skip
        elif size and size + options.reserve > there:
            extra = f" and {options.reserve} in reserve" if options.reserve else ""
            fix = f"ask for at most {max(there - options.reserve, 0):,} points"
            fix += ", or for fewer in reserve" if options.reserve else ""
            problems.append(Problem(f"{size:,} points{extra} are asked of stratum {name!r}, which has {there:,} {unit}",
                                    str(population.path), fix))  # fmt: skip
    raise_if_errors(problems, SampleError)


def _choose(
    population: Population, found: Scan, sizes: Mapping[str, int], options: DrawOptions,
    taken: Mapping[str, Sequence[Cells]],
) -> tuple[list[Drawn], dict[int, int]]:  # fmt: skip
    """Units in the order of keys, the rarest stratum first; and how many fitted of strata that fell short, by place."""
    across = population.grid.width if options.segment_px == 1 else segments_across(population)
    spacing = _Spacing(population.grid, options)
    for units in taken.values():
        spacing.allows(list(units))
    drawn: dict[str, Drawn] = {}
    short: dict[int, int] = {}
    for place in sorted(range(len(population.names)), key=lambda p: (found.units[p], p)):
        name = population.names[place]
        size = sizes.get(name, 0)
        if not size:
            continue
        known = [row * across + col for row, col in taken.get(name, ())]
        offered, wanted = found.lowest[place].units, size + options.reserve
        fresh = offered[~np.isin(offered, known)]
        if not options.apart_m:
            fresh = fresh[:wanted]
        cells = list(zip((fresh // across).tolist(), (fresh % across).tolist(), strict=True))
        chosen = cells if not options.apart_m else spacing.pick(cells, wanted)
        if len(chosen) < wanted:
            short[place] = len(chosen)
        drawn[name] = Drawn(name, tuple(chosen[:size]), tuple(chosen[size:]))
    return [drawn[name] for name in population.names if name in drawn], short


def _no_room(
    population: Population, place: int, short: Mapping[int, int], sizes: Mapping[str, int], options: DrawOptions
) -> Problem:
    name = population.names[place]
    asked = sizes[name] + options.reserve
    if not options.apart_m:
        return Problem(f"{asked:,} more points are asked of stratum {name!r}, and {short[place]:,} are left",
                       fix="ask for fewer, or name other strata with --add-to")  # fmt: skip
    return Problem(
        f"only {short[place]:,} of {asked:,} points of stratum {name!r} fit with {options.apart_m:g} m between points",
        str(population.path), "ask for fewer points or a smaller distance",
    )  # fmt: skip


class _Spacing:
    """Places that keep a ground distance: by straight lines between points on the ellipsoid, which at such distances
    are as long as the way over the ground. Neighbours are found by cubes as wide as the distance."""

    def __init__(self, grid: Grid, options: DrawOptions) -> None:
        self.grid, self.apart_m, self.side = grid, options.apart_m, options.segment_px
        geodetic = pyproj.CRS.from_user_input(grid.crs.to_wkt()).geodetic_crs
        self.to_space = pyproj.Transformer.from_crs(grid.crs, 4978, always_xy=True) if geodetic else None
        self.cubes: dict[tuple[int, int, int], list[NDArray[np.float64]]] = {}

    def pick(self, units: Sequence[Cells], wanted: int) -> list[Cells]:
        """The first `wanted` units that keep their distance from those before and from each other."""
        chosen: list[Cells] = []
        for first in range(0, len(units), 4096):
            part = units[first : first + 4096]
            for unit, ok in zip(part, self.allows(part, wanted - len(chosen)), strict=True):
                if ok:
                    chosen.append(unit)
            if len(chosen) == wanted:
                break
        return chosen

    def allows(self, units: Sequence[Cells], most: int | None = None) -> list[bool]:
        """Whether each unit keeps its distance; those that do are remembered, up to `most`."""
        if not self.apart_m or not units or self.to_space is None:
            return [True] * len(units)
        middle = (self.side - 1) / 2
        rows, cols = (np.array([u[i] for u in units], np.float64) * self.side + middle + 0.5 for i in (0, 1))
        t = self.grid.transform
        x, y = t.a * cols + t.b * rows + t.c, t.d * cols + t.e * rows + t.f
        space = np.stack(self.to_space.transform(x, y, np.zeros_like(x)), axis=1)
        result, left = [], len(units) if most is None else most
        for place in space:
            cube = tuple(int(c) for c in np.floor(place / self.apart_m))
            near = [p for d in _AROUND for p in self.cubes.get((cube[0] + d[0], cube[1] + d[1], cube[2] + d[2]), ())]
            ok = left > 0 and all(float(np.sum((place - p) ** 2)) >= self.apart_m**2 for p in near)
            result.append(ok)
            if ok:
                left -= 1
                self.cubes.setdefault((cube[0], cube[1], cube[2]), []).append(place)
        return result


_AROUND = [(i, j, k) for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)]


def _notes(options: DrawOptions) -> tuple[str, ...]:
    notes = []
    if options.apart_m:
        notes.append(
            f"Points nearer than {options.apart_m:g} m to one drawn before were passed over. Inclusion probabilities "
            "are then no longer exactly equal by area, and variances are estimated as without the distance."
        )
    if options.segment_px > 1:
        notes.append(
            f"Segments of {options.segment_px} x {options.segment_px} pixels were drawn with probability proportional "
            "to the ground area of a pixel there, so that shares of labelled pixels stand for shares of the ground; "
            "all pixels of a segment in the population are labelled, and estimates take each segment as one unit."
        )
    return tuple(notes)


# --- systematic -----------------------------------------------------------------------------------------------------


def draw_lattice(population: Population, size: int, options: DrawOptions, progress: Progress = SILENT) -> Draw:
    """A square lattice of about `size` points with a random start. Raises SampleError when the map is too small."""
    check_options(options)
    found = scan(population, options.seed, 0, jobs=options.jobs, progress=progress)
    _not_empty(population, found)
    if size > found.pixels[0]:
        raise SampleError(f"{size:,} points are asked for, but the map has {found.pixels[0]:,} pixels",
                          where=str(population.path), fix="ask for fewer points")  # fmt: skip
    spacing_m = float(np.sqrt(found.area_m2[0] / size))
    rows, cols = _lattice(population.grid, spacing_m, stream(options.seed, START))
    keep = population.grid.contains(rows, cols)
    rows, cols = _members(population, rows[keep], cols[keep])
    units = sorted({(int(r), int(c)) for r, c in zip(rows, cols, strict=True)})
    if not units:
        raise SampleError("no point of the lattice falls on the map", fix="ask for more points, or use another seed")
    note = (
        f"A square lattice of {spacing_m:.1f} m on the ground with a random start: the number of points follows from "
        "it. Its variance is estimated as if it were simple random, which tends to overstate it."
    )
    return Draw(found, (Drawn(WHOLE_MAP, tuple(units)),), (note,))


def _lattice(grid: Grid, spacing_m: float, start: np.uint64) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Rows and columns of the pixels that hold lattice points, in a Lambert azimuthal equal-area projection (Snyder
    1987) around the middle of the map."""
    crs = pyproj.CRS.from_user_input(grid.crs.to_wkt()).to_2d()
    middle = geopandas.GeoSeries.from_xy(*_middle(grid), crs=crs).to_crs(4326)
    flat = pyproj.CRS.from_dict({"proj": "laea", "lat_0": middle.y[0], "lon_0": middle.x[0], "ellps": "WGS84"})
    there = pyproj.Transformer.from_crs(crs, flat, always_xy=True)
    x, y = there.transform(*_outline(grid))
    finite = np.isfinite(x) & np.isfinite(y)
    left, right, low, high = x[finite].min(), x[finite].max(), y[finite].min(), y[finite].max()
    shift = lots(start, np.arange(2)) * spacing_m
    xs = np.arange(np.floor(left / spacing_m) * spacing_m + shift[0], right + spacing_m, spacing_m)
    ys = np.arange(np.floor(low / spacing_m) * spacing_m + shift[1], high + spacing_m, spacing_m)
    xs, ys = np.concatenate([[xs[0] - spacing_m], xs]), np.concatenate([[ys[0] - spacing_m], ys])
    gx, gy = np.meshgrid(xs, ys)
    back_x, back_y = there.transform(gx.ravel(), gy.ravel(), direction="INVERSE")
    ok = np.isfinite(back_x) & np.isfinite(back_y)
    return grid.rowcol(back_x[ok], back_y[ok])


def _middle(grid: Grid) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    return grid.xy(np.array([grid.height // 2]), np.array([grid.width // 2]))


def _outline(grid: Grid) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Places along the edge of the map, close enough to follow its curve in another projection."""
    rows, cols = np.linspace(0, grid.height, 65), np.linspace(0, grid.width, 65)
    r = np.concatenate([rows, rows, np.zeros(65), np.full(65, grid.height)])
    c = np.concatenate([np.zeros(65), np.full(65, grid.width), cols, cols])
    t = grid.transform
    return t.a * c + t.b * r + t.c, t.d * c + t.e * r + t.f


def _members(
    population: Population, rows: NDArray[np.int64], cols: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Those pixels that belong to the population; only the strips of rows that hold any are read."""
    keep = np.zeros(len(rows), bool)
    with population.open() as source:
        for strip in np.unique(rows // 512):
            here = np.flatnonzero(rows // 512 == strip)
            for band in np.unique(cols[here] // 4096):
                part = here[cols[here] // 4096 == band]
                top, left = int(strip) * 512, int(band) * 4096
                window = Window(
                    top, left, min(512, population.grid.height - top), min(4096, population.grid.width - left)
                )
                keep[part] = population.members(source, window)[rows[part] - top, cols[part] - left] >= 0
    return rows[keep], cols[keep]


def pixels_of(population: Population, units: Sequence[Cells]) -> list[list[Cells]]:
    """The pixels (row, col) of each unit that belong to the population; a pixel is its own."""
    k = population.segment_px
    if k == 1:
        return [[unit] for unit in units]
    result = []
    whole = population.grid.window
    with population.open() as source:
        for row, col in units:
            window = Window(row * k, col * k, k, k).intersect(whole)
            assert window is not None, (row, col)
            r, c = np.nonzero(population.members(source, window) >= 0)
            result.append([(int(i) + window.row, int(j) + window.col) for i, j in zip(r, c, strict=True)])
    return result
