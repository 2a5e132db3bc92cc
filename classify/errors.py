"""One small tree of errors. Each says what is wrong, where, and what to do about it.

The library raises these and nothing else for a problem that the user can mend; the command line shows them without a
traceback and exits with 1. Anything else that escapes is a defect of ours.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Literal

Severity = Literal["error", "warning"]


@dataclass(frozen=True, slots=True)
class Problem:
    """One finding about the user's input.

    what: what is wrong, with the offending value. where: file, key path, row or layer, or "" if it has no place.
    fix: what the user can do, or "". severity: an error stops the work, a warning travels to the outputs.
    """

    what: str
    where: str = ""
    fix: str = ""
    severity: Severity = "error"

    def __str__(self) -> str:
        text = f"{self.where}: {self.what}" if self.where else self.what
        return f"{text}\n  → {self.fix}" if self.fix else text


class LandassayError(Exception):
    """A problem that the user can mend. `problems` holds every finding, so that all are shown at once."""

    def __init__(self, what: str | Sequence[Problem], *, where: str = "", fix: str = "") -> None:
        if isinstance(what, str):
            problems: tuple[Problem, ...] = (Problem(what, where, fix),)
        else:
            problems = tuple(what)
        assert problems, "an error needs at least one problem"
        self.problems = problems
        super().__init__("\n".join(str(problem) for problem in problems))

    def __reduce__(self) -> tuple[type[LandassayError], tuple[tuple[Problem, ...]]]:
        # Errors come back from workers whole, with their places and what to do.
        return type(self), (self.problems,)


class SettingsError(LandassayError):
    """The project file or a preset is wrong."""


class DataError(LandassayError):
    """An input file (raster, vector or table) is missing, broken or unfit for its purpose."""


class TrainingError(LandassayError):
    """The training data cannot support what is asked of them."""


class ModelError(LandassayError):
    """A model file is unsafe, broken or does not fit the scene."""


class SampleError(LandassayError):
    """A reference sample, its design or its labels are wrong."""


class OutputError(LandassayError):
    """A result cannot be written, or would overwrite something of the user's."""


def raise_if_errors(problems: Iterable[Problem], kind: type[LandassayError] = LandassayError) -> None:
    """Raise one `kind` holding every problem of severity "error", if there is any."""
    errors = [problem for problem in problems if problem.severity == "error"]
    if errors:
        raise kind(errors)
