"""Every word of the documents, one file per language; a sentence is looked up by key and filled with values.

Stretches between asterisks are set strong. They are found before values are filled in, so that a class name with an
asterisk or a brace stays the text it is.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from classify.errors import SettingsError
from classify.report.numbers import NumberStyle

_FOLDER = Path(__file__).parent / "messages"


@dataclass(frozen=True, slots=True)
class Span:
    """A stretch of text."""

    text: str
    strong: bool = False


Rich = tuple[Span, ...]


@dataclass(frozen=True, slots=True)
class Messages:
    """The words of one language. texts: nested tables as in the file."""

    language: str
    texts: Mapping[str, Any]

    @property
    def numbers(self) -> NumberStyle:
        """How this language writes numbers."""
        return NumberStyle(**self.texts["numbers"])

    def text(self, key: str, **values: object) -> str:
        """The sentence `key` ("section.name") with its values, as plain text."""
        return "".join(span.text for span in self.rich(key, **values))

    def rich(self, key: str, **values: object) -> Rich:
        """The sentence `key` with its values and its strong stretches."""
        return _filled(self.template(key), values)

    def template(self, key: str) -> str:
        """The sentence `key` with its places unfilled, for the script of a page to fill."""
        found = self._find(key)
        assert isinstance(found, str), key
        return found

    def listing(self, key: str) -> tuple[Rich, ...]:
        """A list of sentences."""
        found = self._find(key)
        assert isinstance(found, list), key
        return tuple(_filled(item, {}) for item in found)

    def terms(self, key: str) -> dict[str, str]:
        """A table of terms and what they mean."""
        found = self._find(key)
        assert isinstance(found, dict), key
        return {str(name): str(value) for name, value in found.items()}

    def _find(self, key: str) -> Any:  # noqa: ANN401 - a branch or a leaf of the file
        found: Any = self.texts
        for part in key.split("."):
            found = found[part]
        return found


def _filled(template: str, values: Mapping[str, object]) -> Rich:
    parts = template.split("*")
    return tuple(Span(part.format_map(values), strong=i % 2 == 1) for i, part in enumerate(parts) if part)


def languages() -> list[str]:
    """Languages that reports can be written in."""
    return sorted(path.stem for path in _FOLDER.glob("*.toml"))


@cache
def load_messages(language: str) -> Messages:
    """The words of a language. Raises SettingsError naming those that exist."""
    if language not in languages():
        raise SettingsError(
            f"there are no report texts in {language!r}", where="report.language",
            fix=f"choose one of: {', '.join(languages())}",
        )  # fmt: skip
    return Messages(language, tomllib.loads((_FOLDER / f"{language}.toml").read_text(encoding="utf-8")))


def plain(text: str) -> Rich:
    """Text without strong stretches."""
    return (Span(text),)
