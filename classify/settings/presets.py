"""Presets: named data in configs/, looked up whatever the case, listed when a name is not found."""

from __future__ import annotations

import tomllib
from functools import cache
from pathlib import Path
from typing import Any, Literal

from classify.errors import SettingsError

PresetKind = Literal["sensors", "materials", "templates"]


@cache
def configs_folder() -> Path:
    """Where configs/ lies: inside the package once installed, beside it in a clone."""
    package = Path(__file__).resolve().parent.parent
    for folder in (package / "configs", package.parent / "configs"):
        if folder.is_dir():
            return folder
    raise SettingsError(
        "the folder of presets, configs/, is missing", where=str(package), fix="install landassay again"
    )


def preset_names(kind: PresetKind) -> list[str]:
    """Names of all presets of a kind, sorted."""
    return sorted(path.stem for path in (configs_folder() / kind).glob("*.toml"))


def load_preset(kind: PresetKind, name: str) -> dict[str, Any]:
    """One preset as plain data, a fresh copy at each call. Raises SettingsError naming the valid ones."""
    names = preset_names(kind)
    wanted = name.strip().casefold()
    for known in names:
        if known.casefold() == wanted:
            return read_toml(configs_folder() / kind / f"{known}.toml")
    raise SettingsError(f"no {kind[:-1]} preset is called {name!r}", fix=f"choose one of: {', '.join(names) or 'none'}")


_MOST_BYTES = 4 << 20


def read_toml(path: Path) -> dict[str, Any]:
    """A TOML file as plain data. Raises SettingsError with the parser's line and column."""
    try:
        if path.stat().st_size > _MOST_BYTES:
            raise SettingsError("this file is far too large for settings", where=str(path))
        return tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except FileNotFoundError as error:
        raise SettingsError("there is no such file", where=str(path)) from error
    except UnicodeDecodeError as error:
        raise SettingsError(f"the file is not UTF-8 text ({error.reason})", where=str(path)) from error
    except (ValueError, RecursionError) as error:  # also numbers and depths that the parser does not take
        raise SettingsError(f"this is not valid TOML: {error}", where=str(path)) from error
    except OSError as error:
        raise SettingsError(f"the file cannot be read: {error.strerror}", where=str(path)) from error
