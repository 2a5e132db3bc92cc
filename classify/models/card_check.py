"""What model.json must hold for the model to be used: it comes with the model file, from whoever trained it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError

from classify.errors import ModelError, Problem
from classify.settings.model import ModelKind
from classify.text import plain, unseen

FIX = "train the model again, or get the file anew from whoever trained it"


def _seen(text: str) -> str:
    if code := unseen(text):
        raise ValueError(f"holds a character that cannot be seen ({code})")
    return text


_Text = Annotated[str, AfterValidator(_seen)]
_Digest = Annotated[str, Field(pattern="^[0-9a-f]{64}$")]


class _Part(BaseModel):
    model_config = ConfigDict(extra="allow", allow_inf_nan=False)


class _Class(_Part):
    code: int = Field(ge=1, le=255)
    name: _Text = Field(min_length=1)


class _Calibration(_Part):
    temperature: float = Field(gt=0)


class _Quantiles(_Part):
    values: dict[str, Annotated[list[float], Field(min_length=1)]]


class _Training(_Part):
    quantiles: _Quantiles


class _Card(_Part):
    schema_: Literal[1] = Field(alias="schema")
    kind: ModelKind
    needs: list[_Text]
    features: list[_Text] = Field(min_length=1)
    recipe: dict[str, Any]
    classes: list[_Class] = Field(min_length=1)
    versions: dict[str, _Text]
    training: _Training
    screening: dict[str, Any]
    calibration: _Calibration
    warnings: list[_Text]
    model_sha256: _Digest
    reach_sha256: _Digest | None = None


def check_card(data: Mapping[str, Any], where: str) -> None:
    """Raise ModelError listing all that is missing from a card or is not as `save_model` writes it."""
    if data.get("schema") != 1:
        what = f"the card follows schema {str(data.get('schema'))[:40]}, this version reads 1"
        raise ModelError(what, where=where, fix=FIX)
    try:
        card = _Card.model_validate(dict(data))
    except ValidationError as error:
        found = error.errors(include_url=False, include_input=False)
        missing = [str(one["loc"][0]) for one in found if one["type"] == "missing" and len(one["loc"]) == 1]
        problems = [
            Problem(f"the card's {plain('.'.join(map(str, one['loc'])))[:200]}: {one['msg']}", where, FIX)
            for one in found[:20] if one["type"] != "missing" or len(one["loc"]) > 1
        ]  # fmt: skip
        if missing:
            problems.insert(0, Problem(f"the card lacks {', '.join(missing)}", where, FIX))
        raise ModelError(problems) from error
    if list(card.training.quantiles.values) != card.features:
        raise ModelError("the card describes other features than it lists", where=where, fix=FIX)
