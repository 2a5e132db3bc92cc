"""Typed models of project.toml. Unknown keys are refused; every default is stated here and nowhere else.

Paths are kept as written, relative to the project file; `Project.path` resolves them.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    PrivateAttr,
    field_validator,
    model_validator,
)

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

# Names that formulas use for bands and features: letters, digits and underscores, not starting with a digit.
_NAME = re.compile(r"^[A-Za-z_][A-Za-z0-9_]*$")


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, str_strip_whitespace=True, allow_inf_nan=False)


class ProjectInfo(_Section):
    """[project]: who made the map, for whom, and the seed of every stochastic step."""

    title: str = Field(min_length=1)
    client: str = ""
    author: str = ""
    seed: int = Field(default=0, ge=0, le=2**32 - 1)


class BandSettings(_Section):
    """One band: where it lies and how its stored numbers become reflectance = stored * scale + offset."""

    file: str = Field(min_length=1, description="path from the project file, https address or GDAL virtual path")
    band: int = Field(default=1, ge=1, description="number of the band in the file, from 1")
    scale: float | None = Field(default=None, description="default: [scene], the file, the preset, 1")
    offset: float | None = Field(default=None, description="default: [scene], the file, the preset, 0")
    nodata: float | None = Field(
        default=None, allow_inf_nan=True, description="stored value of no data; default: [scene], file, preset"
    )
    wavelength_nm: float | None = Field(default=None, gt=0, description="centre; default: the file, the preset")


def _file_alone(value: Any) -> Any:  # noqa: ANN401 - whatever the file holds
    return {"file": value} if isinstance(value, str) else value


# blue = "b02.tif" is short for blue = { file = "b02.tif" }
_FILE_ALONE = BeforeValidator(_file_alone, json_schema_input_type=BandSettings | str)


class MaskSettings(_Section):
    """[scene.mask]: a raster that says which pixels not to use, by codes or by bits."""

    file: str = Field(min_length=1, description="path from the project file, https address or GDAL virtual path")
    band: int = Field(default=1, ge=1, description="number of the band in the file, from 1")
    reject: list[int | str] = Field(
        default_factory=list, description='codes, or meanings that the sensor\'s preset names, such as "cloud"'
    )
    bits: dict[str, Annotated[int, Field(ge=0, le=31)]] = Field(
        default_factory=dict, description="name = number of a bit that rejects the pixel where it is set"
    )

    buffer_m: float = Field(
        default=0.0, ge=0, le=20_000, description="pixels this near to a rejected one are rejected too, in metres"
    )

    @model_validator(mode="after")
    def _one_way_to_reject(self) -> MaskSettings:
        if self.reject and self.bits:
            raise ValueError("give either 'reject' (codes or meanings) or 'bits' (name = bit number), and not both")
        return self


class _Acquisition(_Section):
    """What one date consists of."""

    sensor: str | None = Field(default=None, description="a preset: wavelengths, scale, no data, meaning of the mask")
    scale: float | None = Field(default=None, description="reflectance = stored * scale + offset, for all bands")
    offset: float | None = None
    nodata: float | None = Field(default=None, allow_inf_nan=True)
    bands: dict[str, Annotated[BandSettings, _FILE_ALONE]] = Field(min_length=1, description="role = file or table")
    mask: MaskSettings | None = None

    @field_validator("bands")
    @classmethod
    def _roles_are_names(cls, value: dict[str, BandSettings]) -> dict[str, BandSettings]:
        bad = [role for role in value if not _NAME.match(role)]
        if bad:
            raise ValueError(f"band role {bad[0]!r} must be letters, digits and underscores, as formulas use it")
        return value


# The date in a layer's name, as in nir@2024_06; formulas read it so.
DateName = Annotated[str, Field(pattern=r"^[A-Za-z0-9_]+$")]


class DateSettings(_Acquisition):
    """[[scene.dates]]: one further date of the same place; its layers are called role@name.

    A date that names no sensor takes the sensor, scale, offset and nodata that it does not give itself from [scene].
    """

    name: DateName


class AncillarySettings(_Section):
    """[scene.ancillary]: a raster that is no reflectance band, by name: never masked, categories not interpolated."""

    file: str = Field(min_length=1, description="path from the project file, https address or GDAL virtual path")
    band: int = Field(default=1, ge=1, description="number of the band in the file, from 1")
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = Field(default=None, allow_inf_nan=True)
    categorical: bool = Field(default=False, description="values are codes: the nearest is taken, none is blended")


_ANCILLARY_FILE_ALONE = BeforeValidator(_file_alone, json_schema_input_type=AncillarySettings | str)


class CompositeSettings(_Section):
    """[scene.composite]: one value per band and pixel out of the dates that are clear there."""

    method: Literal["median", "highest", "lowest"] = Field(
        description="the median of each band, or all bands of the date with the highest or lowest index"
    )
    of: tuple[str, str] | None = Field(
        default=None, description="two roles a, b: take the date with the highest or lowest (a - b) / (a + b)"
    )
    minimum_clear: int = Field(default=1, ge=1, description="a pixel with fewer clear dates is no data")

    @model_validator(mode="after")
    def _of_where_needed(self) -> CompositeSettings:
        if (self.method == "median") != (self.of is None):
            raise ValueError('\'of\' (two roles) belongs to the methods "highest" and "lowest", which need it')
        return self


class SceneSettings(_Acquisition):
    """[scene]: the bands by role, the grid of the map, the mask; further dates, ancillary rasters, a composite."""

    grid: str | float | None = Field(
        default=None, description="a band role, or a pixel size in units of the first band's CRS; default: finest band"
    )
    resampling: Literal["bilinear", "nearest"] = Field(
        default="bilinear", description="how bands that do not lie on the grid are brought onto it"
    )
    date: DateName | None = Field(default=None, description="name of the date of [scene.bands], for composites")
    dates: list[DateSettings] = Field(default_factory=list, description="further dates of the same place")
    ancillary: dict[str, Annotated[AncillarySettings, _ANCILLARY_FILE_ALONE]] = Field(
        default_factory=dict, description="other rasters by name, such as elevation"
    )
    composite: CompositeSettings | None = None

    @property
    def files(self) -> list[str]:
        """Every file of the scene as written, each once."""
        parts: list[BandSettings | AncillarySettings | MaskSettings] = []
        acquisitions: list[_Acquisition] = [self, *self.dates]
        for one in acquisitions:
            parts += [*one.bands.values(), *([one.mask] if one.mask else [])]
        return list(dict.fromkeys(part.file for part in [*parts, *self.ancillary.values()]))

    @model_validator(mode="after")
    def _grid_names_a_band(self) -> SceneSettings:
        if isinstance(self.grid, str) and self.grid not in self.bands:
            raise ValueError(f"grid = {self.grid!r} is not one of the bands ({', '.join(self.bands)})")
        if isinstance(self.grid, float) and self.grid <= 0:
            raise ValueError(f"grid = {self.grid} must be a positive pixel size")
        return self

    @model_validator(mode="after")
    def _layer_names_are_distinct(self) -> SceneSettings:
        names = [date.name for date in self.dates] + ([self.date] if self.date else [])
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            raise ValueError(f"the date {twice[0]!r} is named more than once")
        taken = {*self.bands, *(["clear_count"] if self.composite else [])}
        for name in self.ancillary:
            if not _NAME.match(name):
                raise ValueError(f"ancillary name {name!r} must be letters, digits and underscores, as formulas use it")
            if name in taken:
                raise ValueError(f"ancillary name {name!r} is taken by a band")
        return self

    @model_validator(mode="after")
    def _composite_has_its_dates(self) -> SceneSettings:
        if self.composite is None:
            return self
        if not self.dates or self.date is None:
            raise ValueError("a composite needs further dates ([[scene.dates]]) and a name for the first (scene.date)")
        for date in self.dates:
            if lacking := ", ".join(role for role in self.bands if role not in date.bands):
                raise ValueError(f"a composite needs every band on every date; {date.name!r} lacks {lacking}")
        if unknown := sorted(set(self.composite.of or ()) - set(self.bands)):
            raise ValueError(f"the composite's 'of' names {unknown[0]!r}, which is not one of the bands")
        if (least := self.composite.minimum_clear) > len(self.dates) + 1:
            raise ValueError(f"minimum_clear = {least}, but there are only {len(self.dates) + 1} dates")
        return self


class ClassSettings(_Section):
    """[[class]]: one cover class. Code 0 is no data in the map, so codes run from 1 to 255."""

    code: int = Field(ge=1, le=255)
    name: str = Field(min_length=1)
    colour: str | None = Field(default=None, pattern=r"^#[0-9a-fA-F]{6}$")
    material: str | None = None


class TrainingSettings(_Section):
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


TextureStatistic = Literal["mean", "standard deviation", "range", "contrast", "homogeneity", "entropy", "correlation"]
TerrainStatistic = Literal["slope", "aspect sine", "aspect cosine", "topographic position", "hillshade"]
AbsorptionMeasure = Literal["depth", "area", "position", "asymmetry", "slope"]


def _odd(size: int) -> int:
    if size % 2 == 0:
        raise ValueError(
            f"a window has a pixel at its centre, so its size must be odd; {size} is even, take {size + 1}"
        )
    return size


WindowSize = Annotated[int, Field(ge=3, le=101), AfterValidator(_odd)]
FeatureName = Annotated[str, Field(pattern=r"^[A-Za-z_][A-Za-z0-9_]*$")]


class TextureSettings(_Section):
    """[[features.texture]]: a statistic of a layer in a square window around each pixel."""

    of: str = Field(description="a band, or an index or another feature")
    statistic: TextureStatistic
    size: WindowSize = Field(default=3, description="pixels on a side, odd")
    levels: int = Field(default=16, ge=2, le=64, description="grey levels of the co-occurrence statistics")
    range: tuple[float, float] | None = Field(
        default=None,
        description="values of the lowest and highest grey level; default: 0 to 1, or an index's usual range",
    )
    name: FeatureName | None = None

    @model_validator(mode="after")
    def _range_rises(self) -> TextureSettings:
        if self.range is not None and not self.range[0] < self.range[1]:
            raise ValueError(f"range = [{self.range[0]}, {self.range[1]}] must give the lower value first")
        return self


class TerrainSettings(_Section):
    """[[features.terrain]]: a shape of the ground from a layer of elevations in metres."""

    statistic: TerrainStatistic
    of: str = "elevation"
    size: WindowSize = Field(default=3, description="window of the topographic position, pixels on a side, odd")
    sun_azimuth: float = Field(
        default=315.0, ge=0, le=360, description="degrees clockwise from north, of the hillshade"
    )
    sun_elevation: float = Field(default=45.0, gt=0, le=90, description="degrees above the horizon, of the hillshade")
    name: FeatureName | None = None


class AbsorptionSettings(_Section):
    """[[features.absorption]]: measures of an absorption dip below the straight line between its shoulders."""

    dip: str = Field(description="a dip of configs/absorptions.toml, or one of a date: clay_2200@wet")
    measures: list[AbsorptionMeasure] = Field(min_length=1)


class SmoothingSettings(_Section):
    """[features.smoothing]: Savitzky-Golay smoothing of the bands along wavelength, before anything else."""

    window: WindowSize = Field(default=7, description="bands that a polynomial is fitted to, odd")
    order: int = Field(default=2, ge=1, le=5, description="degree of the polynomial")

    @model_validator(mode="after")
    def _window_holds_order(self) -> SmoothingSettings:
        if self.order >= self.window:
            raise ValueError(f"order = {self.order} must be less than window = {self.window}")
        return self


class ComponentSettings(_Section):
    """[features.components]: a few components in place of many bands, fitted on a sample of the scene in training."""

    method: Literal["principal components", "minimum noise fraction"] = "principal components"
    count: int = Field(default=5, ge=1, le=100)
    of: Literal["bands"] | list[str] = Field(
        default="bands", description="the bands with a wavelength, or any features"
    )


class FeatureSettings(_Section):
    """[features]: what the model sees of a pixel."""

    bands: Literal["all", "all dates"] | list[str] = Field(
        default="all", description="the main date's bands, those of every date too, or some by name; [] for none"
    )
    layers: list[str] = Field(default_factory=list, description="other layers as they are: ancillary ones, clear_count")
    bad_bands_nm: list[tuple[float, float]] = Field(
        default_factory=list, description="ranges of wavelength, in nm, whose bands are not used unless named"
    )
    smoothing: SmoothingSettings | None = None
    indices: list[str] = Field(default_factory=list)
    formulas: dict[str, str] = Field(default_factory=dict)
    texture: list[TextureSettings] = Field(default_factory=list)
    terrain: list[TerrainSettings] = Field(default_factory=list)
    absorption: list[AbsorptionSettings] = Field(default_factory=list)
    components: ComponentSettings | None = None

    @field_validator("formulas")
    @classmethod
    def _formula_names(cls, value: dict[str, str]) -> dict[str, str]:
        bad = [name for name in value if not _NAME.match(name)]
        if bad:
            raise ValueError(f"feature name {bad[0]!r} must be letters, digits and underscores")
        return value


class ModelSettings(_Section):
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


class MapSettings(_Section):
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


class ReferenceSettings(_Section):
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


class ReportSettings(_Section):
    """[report]: how results are expressed."""

    confidence_level: float = Field(default=0.95, gt=0.5, lt=1)
    interval: IntervalName = "automatic"
    area_unit: AreaUnit = "ha"
    language: str = Field(default="en", description='language of the documents, such as "en" or "es"')
    logo: str | None = Field(default=None, description="a picture for the title block")
    sections: list[str] | None = Field(default=None, description="sections to keep; default: all")
    response_design: str = Field(default="", description="how points were labelled: by whom, on what, by which rules")


class Project(_Section):
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
