"""Typed models of project.toml. Unknown keys are refused; every default is stated here and nowhere else.

Paths are kept as written, relative to the project file; `Project.path` resolves them.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field, PrivateAttr, field_validator

from classify.settings.features import FeatureSettings
from classify.settings.scene import SceneSettings
from classify.settings.section import Section

ModelKind = Literal["random forest", "support vector machine", "linear support vector machine"]
AreaUnit = Literal["ha", "km2", "m2", "acre"]
IntervalName = Literal["automatic", "normal", "wilson", "student", "bootstrap"]
SampleEvidence = Literal["probability sample", "purposive sample"]
# The acre is the international one.
M2_PER_UNIT: dict[str, float] = {"ha": 10_000.0, "km2": 1_000_000.0, "m2": 1.0, "acre": 4046.8564224}

# Okabe & Ito (2008), "Color universal design", the published colour-blind-safe scheme, then tints and shades of it for
# projects with more classes than the scheme has colours. Used only for classes whose colour is not given.
DEFAULT_COLOURS = (
    "#009e73", "#e69f00", "#56b4e9", "#d55e00", "#0072b2", "#cc79a7", "#f0e442", "#000000",
    "#66c5ab", "#f0c566", "#9ad2f2", "#e69e66",
    "#00573f", "#7f5700", "#2f6380", "#753400", "#003f62", "#70435c", "#847d24",
    "#ade0d2", "#f7e0ad", "#c9e7f8", "#f2cbad", "#add2e6", "#efd4e3", "#faf6c3",
)  # fmt: skip


class ProjectInfo(Section):
    """[project]: who made the map, for whom, and the seed of every stochastic step."""

    title: str = Field(min_length=1)
    client: str = ""
    author: str = ""
    seed: int = Field(default=0, ge=0, le=2**32 - 1)


class ClassSettings(Section):
    """[[class]]: one cover class. Code 0 is no data in the map, so codes run from 1 to 255."""

    code: int = Field(ge=1, le=255)
    name: str = Field(min_length=1)
    colour: str | None = Field(default=None, pattern=r"^#[0-9a-fA-F]{6}$")
    material: str | None = None


class TrainingSettings(Section):
    """[training]: the labelled polygons."""

    polygons: str = Field(min_length=1)
    layer: str | None = None
    label: str = Field(min_length=1, description="column with the class name or code")
    exclude: list[Annotated[int, Field(ge=1)]] = Field(
        default_factory=list, description="polygons to leave out, by their place in the file counted from 1"
    )
    inset_m: float = Field(default=0.0, ge=0, le=10_000, description="metres to keep away from polygon edges")
    pixels_per_polygon: int | None = Field(default=None, ge=1, description="at most so many, drawn by the seed")
    pixels_per_class: int | None = Field(default=None, ge=1, description="at most so many, drawn by the seed")
    materials: str | None = Field(default=None, description="folder with materials of your own, one TOML file each")


class ModelSettings(Section):
    """[model]: which classifier."""

    kind: ModelKind = "random forest"
    trees: int = Field(default=300, ge=1, le=5000)
    svm_pixels: int = Field(
        default=20_000, ge=100, description="a support vector machine is fitted on at most so many, drawn by the seed"
    )
    compare: list[ModelKind] = Field(
        default_factory=list, description="more kinds to try; the simplest within one standard error of the best wins"
    )
    tune: bool = Field(default=False, description="search for good settings, with polygons kept whole")
    tuning_draws: int = Field(default=20, ge=1, le=1000, description="settings tried per kind, the default among them")
    folds: int = Field(default=5, ge=2, le=50, description="parts that polygons are dealt into for screening")
    repeats: int = Field(default=3, ge=1, le=100, description="how often they are dealt anew")
    block_m: float | None = Field(
        default=None, gt=0, description="keep square blocks of so many metres whole instead of single polygons"
    )
    importance: bool = Field(default=True, description="measure what each feature and group of features contributes")


class MapSettings(Section):
    """[map]: which layers to write, and how the class map is tidied."""

    confidence: bool = True
    reach: bool = Field(default=True, description="write how far each pixel is from what the training data cover")
    minimum_unit_ha: float = Field(default=0.0, ge=0, description="smaller patches go to a neighbour; 0 keeps all")
    neighbours: Literal[4, 8] = Field(default=8, description="a patch hangs together over edges, or over corners too")
    majority: int = Field(default=1, ge=1, le=15, description="side in pixels of the square that smooths; 1 does not")
    polygons: bool = Field(default=False, description="write the patches as polygons too")

    @field_validator("majority")
    @classmethod
    def _odd(cls, value: int) -> int:
        if value % 2 == 0:
            raise ValueError("the side of the square must be odd, so that a pixel is in its middle")
        return value


class ReferenceSettings(Section):
    """[reference]: the labelled reference sample and, where it was drawn from another map, its design."""

    points: str = Field(min_length=1)
    layer: str | None = None
    label: str = Field(min_length=1, description="column with the class name or code; blank: could not be labelled")
    alternate: str | None = Field(default=None, description="column with a second label that is also acceptable")
    design: str | None = Field(default=None, description="design.json written when the sample was drawn")
    stratum: str | None = Field(default=None, description="column of the points that names the stratum")
    cluster: str | None = Field(default=None, description="column that names the cluster drawn as one unit")
    region: str | None = Field(default=None, description="column that names the region to report separately")
    unlabelled: list[str] = Field(default_factory=list, description="labels that mean 'could not tell'")
    merge: dict[str, str] = Field(default_factory=dict, description="class = class that it counts as")
    evidence: SampleEvidence = "probability sample"


class ReportSettings(Section):
    """[report]: how results are expressed."""

    confidence_level: float = Field(default=0.95, gt=0.5, lt=1)
    interval: IntervalName = "automatic"
    area_unit: AreaUnit = "ha"
    language: str = Field(default="en", description='language of the documents, such as "en" or "es"')
    logo: str | None = Field(default=None, description="a picture for the title block")
    sections: list[str] | None = Field(default=None, description="sections to keep; default: all")
    response_design: str = Field(default="", description="how points were labelled: by whom, on what, by which rules")


class Project(Section):
    """The whole project file. Made by `load_project`; `folder` is where the file lies."""

    project: ProjectInfo
    scene: SceneSettings
    classes: list[ClassSettings] = Field(alias="class", min_length=2)
    training: TrainingSettings
    features: FeatureSettings = FeatureSettings()
    model: ModelSettings = ModelSettings()
    map: MapSettings = MapSettings()
    reference: ReferenceSettings | None = None
    report: ReportSettings = ReportSettings()
    _file: Path = PrivateAttr(default=Path("project.toml"))

    @field_validator("classes")
    @classmethod
    def _distinct(cls, value: list[ClassSettings]) -> list[ClassSettings]:
        given: dict[str, list[Any]] = {"code": [c.code for c in value], "name": [c.name.casefold() for c in value]}
        for what, seen in given.items():
            twice = {item for item in seen if seen.count(item) > 1}
            if twice:
                raise ValueError(f"{what} {sorted(twice, key=str)[0]!r} is given to more than one class")
        spare = (colour for colour in DEFAULT_COLOURS * 32 if colour not in {c.colour for c in value})
        return [c if c.colour else c.model_copy(update={"colour": next(spare)}) for c in value]

    @property
    def file(self) -> Path:
        """The project file itself, absolute."""
        return self._file

    @property
    def folder(self) -> Path:
        """The folder that relative paths start from."""
        return self._file.parent

    def path(self, written: str) -> str:
        """A path as written in the project file, made absolute; GDAL virtual paths and URLs are kept as they are."""
        if written.startswith("/vsi") or re.match(r"^[A-Za-z][A-Za-z0-9+.-]+://", written):
            return written
        return str((self.folder / written).absolute())

    def at(self, file: Path) -> Project:
        """The same settings as read from `file` (absolute)."""
        copy = self.model_copy()
        copy._file = file
        return copy
