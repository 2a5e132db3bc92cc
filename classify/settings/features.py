"""[features]: bands, indices, formulas and computed features as typed models."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import AfterValidator, Field, field_validator, model_validator

from classify.settings.section import NAME, Section

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


class TextureSettings(Section):
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


class TerrainSettings(Section):
    """[[features.terrain]]: a shape of the ground from a layer of elevations in metres."""

    statistic: TerrainStatistic
    of: str = "elevation"
    size: WindowSize = Field(default=3, description="window of the topographic position, pixels on a side, odd")
    sun_azimuth: float = Field(
        default=315.0, ge=0, le=360, description="degrees clockwise from north, of the hillshade"
    )
    sun_elevation: float = Field(default=45.0, gt=0, le=90, description="degrees above the horizon, of the hillshade")
    name: FeatureName | None = None


class AbsorptionSettings(Section):
    """[[features.absorption]]: measures of an absorption dip below the straight line between its shoulders."""

    dip: str = Field(description="a dip of configs/absorptions.toml, or one of a date: clay_2200@wet")
    measures: list[AbsorptionMeasure] = Field(min_length=1)


class SmoothingSettings(Section):
    """[features.smoothing]: Savitzky-Golay smoothing of the bands along wavelength, before anything else."""

    window: WindowSize = Field(default=7, description="bands that a polynomial is fitted to, odd")
    order: int = Field(default=2, ge=1, le=5, description="degree of the polynomial")

    @model_validator(mode="after")
    def _window_holds_order(self) -> SmoothingSettings:
        if self.order >= self.window:
            raise ValueError(f"order = {self.order} must be less than window = {self.window}")
        return self


class ComponentSettings(Section):
    """[features.components]: a few components in place of many bands, fitted on a sample of the scene in training."""

    method: Literal["principal components", "minimum noise fraction"] = "principal components"
    count: int = Field(default=5, ge=1, le=100)
    of: Literal["bands"] | list[str] = Field(
        default="bands", description="the bands with a wavelength, or any features"
    )


class FeatureSettings(Section):
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
        bad = [name for name in value if not NAME.match(name)]
        if bad:
            raise ValueError(f"feature name {bad[0]!r} must be letters, digits and underscores")
        return value
