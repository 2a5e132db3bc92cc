"""Read project.toml into `Project`, reporting every problem at once with its key path and the nearest valid name."""

from __future__ import annotations

import difflib
import os
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from classify.errors import Problem, SettingsError
from classify.settings.model import Project
from classify.settings.presets import read_toml
from classify.text import plain, unseen

_UNION_TAGS = {"str", "float", "int", "list[str]", "literal['all']"}


def load_project(path: str | Path) -> Project:
    """Read a project file, or the project.toml of a folder. Raises SettingsError listing every problem."""
    file = Path(path)
    if os.path.isdir(file):  # noqa: PTH112 - answers for any text
        file = file / "project.toml"
    if not os.path.isfile(file):  # noqa: PTH113
        raise SettingsError(
            "there is no project file here", where=str(file),
            fix="start a project with 'landassay new', or name one with --project PATH",
        )  # fmt: skip
    return parse_project(read_toml(file), file.absolute())


def parse_project(data: Mapping[str, Any], file: Path) -> Project:
    """Validate plain data as read from `file`. Raises SettingsError listing every problem."""
    if hidden := list(_hidden(data, file.name)):
        raise SettingsError(hidden)
    try:
        return Project.model_validate(dict(data)).at(file)
    except ValidationError as error:
        problems = [_problem(detail, file.name) for detail in error.errors()]
        # A union (a list or "all") reports once per member; the user wants one line per key.
        raise SettingsError(list({problem.where: problem for problem in problems}.values())) from error


def project_schema() -> dict[str, Any]:
    """JSON Schema of the project file, for editors that check TOML as it is typed."""
    schema = Project.model_json_schema(by_alias=True)
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", "title": "Landassay project", **schema}


def _hidden(value: object, where: str) -> Iterator[Problem]:
    """Text with characters that nobody sees: names go into file names, tables and documents, where they would act."""
    if isinstance(value, str) and (code := unseen(value)):
        yield Problem(f"the text {plain(value)!r} holds a character that cannot be seen ({code})", where, "retype it")
    elif isinstance(value, Mapping):
        for key, inner in value.items():
            yield from _hidden(str(key), where)
            yield from _hidden(inner, f"{where}: {key}" if ":" not in where else f"{where}.{key}")
    elif isinstance(value, list):
        for number, inner in enumerate(value, 1):
            yield from _hidden(inner, f"{where}[{number}]")


def _problem(detail: ErrorDetails, filename: str) -> Problem:
    location = [part for part in detail["loc"] if str(part) not in _UNION_TAGS and "[" not in str(part)]
    where = f"{filename}: {_dotted(location)}" if location else filename
    if detail["type"] == "extra_forbidden":
        return Problem("this key is not known", where, _nearest(location))
    if detail["type"] == "missing":
        return Problem("this key is required and missing", where)
    message = detail["msg"].removeprefix("Value error, ")
    if detail["type"] == "value_error" or isinstance(detail["input"], Mapping):
        return Problem(message, where)
    fix = ""
    expected = detail.get("ctx", {}).get("expected")
    if detail["type"] == "literal_error" and isinstance(detail["input"], str) and expected:
        fix = _did_you_mean(detail["input"], str(expected).replace("'", "").replace(" or ", ", ").split(", "))
    return Problem(f"{message}; found {detail['input']!r}", where, fix)


def _dotted(location: list[int | str]) -> str:
    text = ""
    for part in location:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text


def _nearest(location: list[int | str]) -> str:
    """Suggest a valid key beside the unknown one, by walking the models along its path."""
    model: type[BaseModel] | None = Project
    for part in location[:-1]:
        if model is not None and isinstance(part, str):
            model = _child(model, part)
    if model is None:
        return ""
    return _did_you_mean(str(location[-1]), [field.alias or name for name, field in model.model_fields.items()])


def _child(model: type[BaseModel], key: str) -> type[BaseModel] | None:
    for name, field in model.model_fields.items():
        if key in (name, field.alias):
            return _first_model(field.annotation)
    # A mapping's own keys (band roles) do not change the model that their values have.
    return model


def _first_model(annotation: Any) -> type[BaseModel] | None:  # noqa: ANN401 - any type expression
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    found = (_first_model(argument) for argument in get_args(annotation))
    return next((model for model in found if model is not None), None)


def _did_you_mean(given: str, valid: list[str]) -> str:
    close = difflib.get_close_matches(given.casefold(), valid, n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]!r}?"
    return f"valid here: {', '.join(valid)}"
