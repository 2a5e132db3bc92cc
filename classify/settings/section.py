"""What every section of project.toml has in common."""

from __future__ import annotations

import re

from pydantic import BaseModel, ConfigDict

# Names that formulas use for bands and features: letters, digits and underscores, not starting with a digit.
NAME = re.compile(r"^[A-Za-z_][A-Za-z0-9_]*$")


class Section(BaseModel):
    """Keys that are not known are refused, and so are numbers that are not finite; values do not change."""

    model_config = ConfigDict(extra="forbid", frozen=True, str_strip_whitespace=True, allow_inf_nan=False)
