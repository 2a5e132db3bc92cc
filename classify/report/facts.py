"""Everything that is reported, as one frozen value of plain data. Documents take this and nothing else."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import pandas as pd

from classify.assessment.evidence import EvidenceName
from classify.assessment.intervals import Estimate

StageKey = Literal["train", "classify", "assess"]


@dataclass(frozen=True, slots=True)
class Heading:
    """Title block. date: ISO date of the newest result reported. logo: PNG or JPEG bytes, or None."""

    title: str
    client: str
    author: str
    date: str
    version: str
    logo: bytes | None = None


@dataclass(frozen=True, slots=True)
class ClassFact:
    """One cover class as mapped: pixels and ground area (in the report's unit), None without a map."""

    code: int
    name: str
    colour: str
    material: str | None = None
    pixels: int | None = None
    mapped: float | None = None


@dataclass(frozen=True, slots=True)
class Layer:
    """One picture layer of the map's extent. kind: what it shows; data: PNG or JPEG bytes; media: its MIME type."""

    kind: Literal["cover", "natural", "false", "confidence", "reach"]
    data: bytes
    media: str


@dataclass(frozen=True, slots=True)
class MapFact:
    """The map as pictures of one size, and what a reader needs to place them.

    size_yx: pixels of the map; picture_yx: pixels of each layer; step_m, pixel_m: ground size of a pixel of the picture
    and of the map (down, across) at the centre; north_deg: true north at the centre, clockwise from up. x_ticks,
    y_ticks: position along the frame 0..1 and label. low_share: share of mapped pixels whose confidence is below
    `low_percent`, beyond_share: of those beyond reach of the training data; None without such a map. tidied: whether
    small patches or outlines were changed after the model had spoken.
    """

    size_yx: tuple[int, int]
    picture_yx: tuple[int, int]
    layers: tuple[Layer, ...]
    step_m: tuple[float, float]
    pixel_m: tuple[float, float]
    north_deg: float
    crs: str
    x_ticks: tuple[tuple[float, str], ...]
    y_ticks: tuple[tuple[float, str], ...]
    low_percent: int = 50
    low_share: float | None = None
    beyond_share: float | None = None
    tidied: bool = False

    def layer(self, kind: str) -> Layer | None:
        """The layer of a kind, if there is one."""
        return next((layer for layer in self.layers if layer.kind == kind), None)


@dataclass(frozen=True, slots=True)
class StratumFact:
    """One stratum: area in the report's unit, labelled points."""

    stratum: str
    area: float
    n: int


@dataclass(frozen=True, slots=True)
class RegionFact:
    """One region of the mapped area: labelled points, its overall accuracy and its class areas."""

    region: str
    n: int
    overall: Estimate
    area: Mapping[str, Estimate]


@dataclass(frozen=True, slots=True)
class AccuracyFacts:
    """What assessment.json says, with estimates by class name. Matrices: rows map, columns reference.

    either: overall agreement with the first or the second label, where points have two. unlabelled: points that nobody
    could label; unlabelled_bounds: overall accuracy if the map were wrong, or right, on all of them. clusters: how many
    there are, None where points were drawn singly. reservations: what takes something from the claim of the sample.
    """

    evidence: EvidenceName
    level: float
    unit: str
    total_area: float
    design_kind: str
    classes: tuple[str, ...]
    strata: tuple[StratumFact, ...]
    counts: tuple[tuple[int, ...], ...]
    shares: tuple[tuple[float, ...], ...]
    overall: Estimate
    users: Mapping[str, Estimate]
    producers: Mapping[str, Estimate]
    f1: Mapping[str, Estimate]
    mapped: Mapping[str, float | None]
    area: Mapping[str, Estimate]
    kappa: Estimate
    quantity: float | None
    allocation: float | None
    warnings: tuple[str, ...] = ()
    clusters: int | None = None
    post_stratified: bool = False
    reservations: tuple[str, ...] = ()
    either: Estimate | None = None
    unlabelled: int = 0
    unlabelled_bounds: tuple[float | None, float | None] = (None, None)
    regions: tuple[RegionFact, ...] = ()

    @property
    def points(self) -> int:
        """Labelled points that were used."""
        return sum(sum(row) for row in self.counts)


@dataclass(frozen=True, slots=True)
class ModelFacts:
    """The model card: kind, features, settings, screening, importance; plain data as in model.json."""

    kind: str
    features: tuple[str, ...]
    classes: tuple[str, ...]
    polygons: int | None
    pixels: int | None
    settings: Mapping[str, Any]
    screening: Mapping[str, Any] | None
    calibration: Mapping[str, Any] | None
    importance: Mapping[str, Any] | None
    warnings: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class PointFact:
    """One reference point: id, position in the picture 0..1 (down, across), map and reference class, stratum."""

    id: str
    at_yx: tuple[float, float]
    mapped: str
    reference: str
    stratum: str


@dataclass(frozen=True, slots=True, eq=False)
class SampleFacts:
    """The labelled sample behind the accuracy, so that a reader can derive the numbers again.

    points: columns id, stratum, map, reference and, where present, alternate, cluster, region. strata: columns stratum,
    area, pixels. method: how it was assessed (keywords of `AssessmentOptions`). assessment: assessment.json.
    """

    points: pd.DataFrame
    strata: pd.DataFrame
    method: Mapping[str, Any]
    assessment: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Provenance:
    """The run record: inputs (path, bytes, SHA-256), versions, seed, stage times, settings as plain data."""

    inputs: tuple[tuple[str, int | None, str | None], ...] = ()
    versions: Mapping[str, str] = field(default_factory=dict)
    system: str = ""
    seed: int | None = None
    stages: tuple[tuple[str, str, float], ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    project_file: str = "project.toml"


@dataclass(frozen=True, slots=True)
class ReportFacts:
    """All that is reported. What a stage has not made is None and named in `missing`."""

    heading: Heading
    language: str
    unit: str
    level: float
    classes: tuple[ClassFact, ...]
    map: MapFact | None
    accuracy: AccuracyFacts | None
    model: ModelFacts | None
    review: Mapping[str, Any] | None
    points: tuple[PointFact, ...]
    provenance: Provenance
    missing: tuple[StageKey, ...] = ()
    warnings: tuple[tuple[str, str], ...] = ()
    sections: tuple[str, ...] | None = None
    response_design: str = ""
    sample: SampleFacts | None = None

    def colour(self, name: str) -> str:
        """Colour of a class by name."""
        return next((c.colour for c in self.classes if c.name == name), "#808080")
