"""What strangers write: inputs that are mostly sound, with something in them that is not."""

from __future__ import annotations

import copy
import json
from collections.abc import Iterator
from typing import Any

from hypothesis import strategies as st
from small_project import CRS, NAMES

from classify.features.formula import FUNCTIONS

TEXTS = [
    "",
    " ",
    "Water",
    "water ",
    "=1+1",
    "+1",
    "-1",
    "@x",
    "<script>alert(1)</script>",
    "</script>",
    "#eval(1)",
    "a&b",
    "../x",
    "..\\x",
    "/etc/passwd",
    "CON",
    "a/b",
    "\x00",
    "\x1b[2J",
    "\u202eretaW",
    "x" * 3000,
    "١٢",
    "1e400",
    "nan",
    "inf",
    "1e-400",
    "999999999999999999999",
    "-0",
    "0x10",
    "1_000",
    "True",
    "None",
    "{}",
    "[]",
    '"',
    "'",
    ",",
    ";",
    "\n",
    "\r\n",
    "\ufeff",
    "Ü",
    "ü",
    "🛰",
    "é",
    "http://169.254.169.254/",
    "/vsicurl/http://x/",
    "NaN",
    "1,5",
    "𝟙",
    "ﬁ",
    "İ",
    "ß",
]
NUMBERS = [0, 1, -1, 2, 5, 255, 256, 2**31, 2**63, -(2**63) - 1, 10**30, 0.5, -0.5, 1e-300, 1e300, 1e308, 5e-324]
JSONS = st.one_of(
    st.none(),
    st.booleans(),
    st.sampled_from(NUMBERS),
    st.sampled_from(TEXTS),
    st.just([]),
    st.just({}),
    st.lists(st.sampled_from([*NUMBERS, *TEXTS]), max_size=3),
    st.integers(),
    st.text(max_size=8),
    st.floats(allow_nan=False, allow_infinity=False),
    st.dictionaries(st.sampled_from(TEXTS), st.integers(), max_size=2),
)
CHANGES = st.lists(
    st.tuples(st.floats(0, 1, exclude_max=True), st.sampled_from(["replace", "replace", "remove", "repeat"]), JSONS),
    min_size=1,
    max_size=3,
)


def places(part: Any) -> Iterator[tuple[Any, Any]]:
    """Every (container, key) of plain data."""
    for key in part if isinstance(part, dict) else range(len(part)) if isinstance(part, list) else ():
        yield part, key
        yield from places(part[key])


def changed(base: Any, changes: list[tuple[float, str, Any]]) -> Any:
    """A copy of plain data with values replaced, removed or repeated at places given as shares of all places."""
    held = copy.deepcopy(base)
    for share, kind, value in changes:
        found = list(places(held))
        if not found:
            break
        inside, key = found[int(share * len(found))]
        if kind == "replace":
            inside[key] = value
        elif kind == "remove":
            del inside[key]
        elif isinstance(inside, list):
            inside.insert(key, copy.deepcopy(inside[key]))
        else:
            inside[str(value)[:40]] = copy.deepcopy(inside[key])
    return held


VALUES = [
    '""',
    '"x"',
    "0",
    "-1",
    "1e400",
    "nan",
    "inf",
    "9" * 30,
    "9" * 5000,
    "[]",
    "{}",
    "[1, 'a']",
    "true",
    "2026-01-01",
    "'''a\nb'''",
    '"\\u0000"',
    '"\\u001b[2J"',
    '"../../../etc/passwd"',
    '"/etc/passwd"',
    '"http://169.254.169.254/a.tif"',
    '"a/b"',
    '"\\u202e"',
    '"' + "x" * 5000 + '"',
    "[" * 3000,
    '"=1+1"',
    '"<script>"',
    "{ file = 3 }",
    "0x7fffffffffffffffffff",
    "1_0",
    "12:00:00",
    '"bands.tif"',
    '"mask.tif"',
    '"training.gpkg"',
    '"reference.gpkg"',
    '"project.toml"',
    '"."',
    '"nir"',
    '["ndvi", "ndvi"]',
    "0.5",
    "3",
]
KEYS = [
    "grid",
    "sensor",
    "scale",
    "offset",
    "nodata",
    "dates",
    "ancillary",
    "composite",
    "resampling",
    "layer",
    "unit",
    "mmu",
    "inset_m",
    "formulas",
    "trees",
    "kind",
    "folds",
    "block_m",
    "tune",
    "interval",
    "confidence",
    "design",
    "evidence",
    "merge",
    "logo",
    "strata",
    "x y",
    "file",
    "band",
    "title",
    "name",
    "code",
    "material",
    "materials",
]
EDITS = st.lists(
    st.tuples(
        st.floats(0, 1, exclude_max=True),
        st.sampled_from(["value", "value", "value", "insert", "remove", "repeat", "cut"]),
        st.sampled_from(KEYS),
        st.sampled_from(VALUES),
    ),
    min_size=1,
    max_size=4,
)


def edited(text: str, edits: list[tuple[float, str, str, str]]) -> str:
    lines = text.splitlines()
    for share, kind, key, value in edits:
        at = int(share * len(lines))
        if kind == "value" and "=" in lines[at]:
            lines[at] = f"{lines[at].partition('=')[0]}= {value}"
        elif kind == "insert":
            lines.insert(at, f'"{key}" = {value}' if " " in key else f"{key} = {value}")
        elif kind == "remove":
            del lines[at]
        elif kind == "repeat":
            lines.insert(int(float(len(key)) / 12 * len(lines)), lines[at])
        elif kind == "cut":
            lines[at] = lines[at][: len(key)]
        if not lines:
            break
    return "\n".join(lines)


STRATA = ["1", "2", "3", "Water", "", "1 "]
FIELDS = st.one_of(st.sampled_from([*NAMES, *STRATA]), st.sampled_from(TEXTS), st.sampled_from(list(map(str, NUMBERS))))
PLAIN = st.sampled_from(NAMES)


@st.composite
def sample_tables(draw: st.DrawFn) -> dict[str, Any]:
    """Points and strata: mostly sound, with a few fields, columns and bytes that are not."""
    count = draw(st.integers(1, 4))
    ids = [str(i + 1) for i in range(count)]
    strata = [["stratum", "area"], *([i, str(draw(st.sampled_from([0, 1, 7.5, 120, 1e-9, 1e12])))] for i in ids)]
    rows = draw(st.lists(st.tuples(st.sampled_from(ids), PLAIN, PLAIN), min_size=1, max_size=25))
    points = [["stratum", "map", "reference"], *map(list, rows)]
    for table in (points, strata):
        for _ in range(draw(st.integers(0, 2))):
            row = draw(st.integers(0, len(table) - 1))
            table[row][draw(st.integers(0, len(table[0]) - 1))] = draw(FIELDS)
    if extra := draw(st.sampled_from(["", "", "cluster", "region", "alternate", "id", "other_map", "map"])):
        points[0].append(extra)
        for row in points[1:]:
            row.append(draw(FIELDS))
    if draw(st.booleans()):
        strata[0].append(draw(st.sampled_from(["mapped_as", "clusters", "pixels"])))
        for row in strata[1:]:
            row.append(draw(FIELDS))
    noise = draw(st.one_of(st.just(None), st.tuples(st.floats(0, 1), st.binary(max_size=4))))
    options = {
        "evidence": draw(st.sampled_from(["probability sample", "probability sample", "purposive sample"])),
        "interval": draw(st.sampled_from(["automatic", "normal", "wilson", "student"])),
        "kind": draw(st.sampled_from([None, None, "simple random", "stratified", "systematic", "post-stratified"])),
    }
    return {
        "points": points,
        "strata": draw(st.sampled_from([strata, strata, None])),
        "noise": noise,
        "options": options,
    }


_LEAVES = st.sampled_from(
    ["nir", "red", "nir@2024", "0", "1", "2.5", "1e38", "1e-45", ".5", "pi", "__import__", "x.y", "0x1", "１"]
)
_FORMULAS = st.recursive(
    _LEAVES,
    lambda inner: st.one_of(
        st.tuples(
            inner, st.sampled_from(["+", "-", "*", "/", "^", "<", "==", " and ", " or ", "**", "//", "%"]), inner
        ).map("".join),
        st.tuples(st.sampled_from([*FUNCTIONS, "eval", "open"]), st.lists(inner, min_size=1, max_size=3)).map(
            lambda f: f"{f[0]}({', '.join(f[1])})"
        ),
        inner.map("({})".format),
        inner.map("-{}".format),
        inner.map("not {}".format),
    ),
    max_leaves=25,
)
FORMULAS = st.one_of(
    _FORMULAS,
    st.text(max_size=60),
    st.text("nir+-*/^()<>=!,.@ 019e", max_size=80),
    st.tuples(
        st.sampled_from(["(", "-", "not ", "abs(", "1+", "1^", "1<", "nir,", "9", " "]), st.integers(1, 6000)
    ).map(lambda f: f[0] * f[1] + "nir"),
)


X, Y = 500_100.0, 4_199_900.0
_NUMBER = st.one_of(
    st.sampled_from([X, Y, X + 200, Y - 200, 0, 1e300, -1e300, 1e-300]), st.floats(X, X + 900), st.floats(Y - 700, Y)
)
_POINT = st.lists(_NUMBER, min_size=1, max_size=4)


@st.composite
def layers(draw: st.DrawFn) -> str:
    """GeoJSON of polygons of the project's CRS: sound squares, some spoiled."""

    def square(at: int) -> dict[str, Any]:
        x, y = X + at * 150, Y - at * 90
        ring = [[x, y], [x + 100, y], [x + 100, y - 80], [x, y - 80], [x, y]]
        return {"type": "Polygon", "coordinates": [ring]}

    features = [
        {"type": "Feature", "properties": {"cover": draw(PLAIN)}, "geometry": square(i)}
        for i in range(draw(st.integers(1, 4)))
    ]
    document = {
        "type": "FeatureCollection",
        "crs": {"type": "name", "properties": {"name": f"urn:ogc:def:crs:{CRS.replace(':', '::')}"}},
        "features": features,
    }
    kinds = ["Polygon", "MultiPolygon", "Point", "LineString", "GeometryCollection", "Curve", "MultiPoint"]
    if draw(st.booleans()):
        features[0]["geometry"]["type"] = draw(st.sampled_from(kinds))
    if draw(st.booleans()):
        features[0]["geometry"]["coordinates"] = draw(
            st.one_of(_POINT, st.lists(_POINT, max_size=5), st.lists(st.lists(_POINT, max_size=6), max_size=2))
        )
    document = changed(document, draw(st.one_of(st.just([]), CHANGES)))
    text = json.dumps(document)
    return draw(
        st.sampled_from([text, text, text.replace("100", "1e400"), text[: len(text) // 2], text.replace(":", "::", 1)])
    )


FILES = ("training.gpkg", "reference.gpkg", "bands.tif", "mask.tif")


BYTES = st.tuples(
    st.sampled_from(FILES),
    st.lists(st.tuples(st.floats(0, 1, exclude_max=True), st.binary(min_size=1, max_size=8)), min_size=1, max_size=4),
)

CELLS = st.one_of(
    st.none(),
    st.sampled_from([*TEXTS, *NAMES, "high", "interpreter", "settling", "Ada"]),
    st.integers(-2, 60),
    st.sampled_from([2**63 - 1, -(2**63)]),
    st.floats(allow_nan=False),
    st.binary(max_size=5),
)
ROWS = st.lists(
    st.tuples(
        st.sampled_from(
            ["point", "role", "interpreter", "undoes", "label", "alternate", "confidence", "note", "written_at"]
        ),
        CELLS,
        st.integers(1, 40),
    ),
    min_size=1,
    max_size=6,
)
JOURNALS = st.tuples(ROWS, st.one_of(st.just(None), st.tuples(st.floats(0, 1), st.binary(min_size=1, max_size=16))))
