"""[scene]: bands, masks, dates, ancillary rasters and composites as typed models."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, field_validator, model_validator

from classify.settings.section import NAME, Section


class BandSettings(Section):
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


class MaskSettings(Section):
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


class _Acquisition(Section):
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
        bad = [role for role in value if not NAME.match(role)]
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


class AncillarySettings(Section):
    """[scene.ancillary]: a raster that is no reflectance band, by name: never masked, categories not interpolated."""

    file: str = Field(min_length=1, description="path from the project file, https address or GDAL virtual path")
    band: int = Field(default=1, ge=1, description="number of the band in the file, from 1")
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = Field(default=None, allow_inf_nan=True)
    categorical: bool = Field(default=False, description="values are codes: the nearest is taken, none is blended")


_ANCILLARY_FILE_ALONE = BeforeValidator(_file_alone, json_schema_input_type=AncillarySettings | str)


class CompositeSettings(Section):
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
            if not NAME.match(name):
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
