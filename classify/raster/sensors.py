"""Sensor presets: what a product's files hold, as typed values read from configs/sensors/."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError

from classify.errors import Problem, SettingsError
from classify.raster.masks import MaskField, bit, codes
from classify.settings import MaskSettings, load_preset


class _Preset(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class SensorBand(_Preset):
    """One band of a sensor. Values not given are those of the whole sensor.

    names: how product files call it. ground: False for a band that shows the air (water vapour), left out of drafts.
    """

    wavelength_nm: float | None = Field(default=None, gt=0)
    width_nm: float | None = Field(default=None, gt=0)
    pixel_m: float | None = Field(default=None, gt=0)
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = None
    names: tuple[str, ...] = ()
    ground: bool = True


class BitField(_Preset):
    """A run of bits in a mask value, and the values of it that have the meaning."""

    first: int = Field(ge=0, le=63)
    width: int = Field(ge=1, le=16)
    values: tuple[int, ...] = Field(min_length=1)


def _bit_alone(value: object) -> object:
    return {"first": value, "width": 1, "values": (1,)} if isinstance(value, int) else value


def _code_alone(value: object) -> object:
    return (value,) if isinstance(value, int) else value


class SensorMask(_Preset):
    """What a product's mask says. reject: the meanings that are rejected unless the project says otherwise."""

    names: tuple[str, ...] = ()
    reject: tuple[str, ...] = ()
    codes: dict[str, Annotated[tuple[int, ...], BeforeValidator(_code_alone)]] = Field(default_factory=dict)
    bits: dict[str, Annotated[BitField, BeforeValidator(_bit_alone)]] = Field(default_factory=dict)

    @property
    def meanings(self) -> tuple[str, ...]:
        """All meanings that can be named."""
        return (*self.codes, *self.bits)

    def field(self, meaning: str) -> MaskField | None:
        """What rejects a meaning (any case; spaces, hyphens or underscores); None if it is not known."""
        wanted = _plain(meaning)
        for name, values in self.codes.items():
            if _plain(name) == wanted:
                return codes(values)
        for name, run in self.bits.items():
            if _plain(name) == wanted:
                return MaskField(run.values, run.first, run.width)
        return None


class Sensor(_Preset):
    """One preset. scale, offset, nodata hold for all bands that do not have their own.

    product: regular expression that file names of its products match.
    """

    title: str
    source: str
    product: str | None = None
    scale: float | None = None
    offset: float | None = None
    nodata: float | None = None
    bands: dict[str, SensorBand] = Field(default_factory=dict)
    mask: SensorMask | None = None


NO_SENSOR = Sensor(title="", source="")


def load_sensor(name: str) -> Sensor:
    """A preset by name. Raises SettingsError listing the valid names, or saying what is wrong in the preset's file."""
    data = load_preset("sensors", name)
    try:
        return Sensor.model_validate(data)
    except ValidationError as error:
        raise SettingsError(
            [
                Problem(detail["msg"], f"configs/sensors/{name}.toml: {'.'.join(map(str, detail['loc']))}")
                for detail in error.errors()
            ]
        ) from error


def mask_fields(settings: MaskSettings, preset: SensorMask | None) -> tuple[MaskField, ...]:
    """What a mask rejects: the codes, meanings or bits of the settings, else the preset's usual ones.

    Raises SettingsError for a meaning that the preset does not know.
    """
    if settings.bits:
        return tuple(bit(number) for number in settings.bits.values())
    preset = preset or SensorMask()
    wanted: tuple[int | str, ...] = tuple(settings.reject) or preset.reject
    if not wanted:
        raise SettingsError(
            "it is not said what the mask rejects, and no sensor's preset says it either",
            fix="add reject = [codes] or bits = { name = number }, or name the sensor",
        )
    fields = [codes(item for item in wanted if isinstance(item, int))]
    problems = []
    for meaning in (item for item in wanted if isinstance(item, str)):
        field = preset.field(meaning)
        if field is None:
            known = ", ".join(preset.meanings)
            fix = f"it knows: {known}" if known else "name a sensor whose preset knows its meanings, or give codes"
            problems.append(Problem(f"the sensor's mask has no meaning {meaning!r}", "", fix))
        else:
            fields.append(field)
    if problems:
        raise SettingsError(problems)
    return tuple(field for field in fields if field.values)


def _plain(text: str) -> str:
    return " ".join(text.replace("_", " ").replace("-", " ").casefold().split())


__all__ = ["NO_SENSOR", "BitField", "Sensor", "SensorBand", "SensorMask", "load_sensor", "mask_fields"]
