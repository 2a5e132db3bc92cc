"""Land-cover classification with accuracy and areas that say what evidence they rest on.

The public Python interface is loaded on first use, so that ``import classify`` and ``landassay --help`` stay quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

# name -> module that defines it
_PUBLIC = {
    "assess": "classify.assessment",
    "Assessment": "classify.assessment",
    "AssessmentOptions": "classify.assessment",
    "Comparison": "classify.assessment",
    "compare": "classify.assessment",
    "LandassayError": "classify.errors",
    "load_project": "classify.settings",
}

__all__ = [
    "Assessment",
    "AssessmentOptions",
    "Comparison",
    "LandassayError",
    "__version__",
    "assess",
    "compare",
    "load_project",
]


def __getattr__(name: str) -> Any:  # noqa: ANN401 - the type is that of whichever object is asked for
    if name not in _PUBLIC:
        raise AttributeError(f"module 'classify' has no attribute {name!r}")
    return getattr(import_module(_PUBLIC[name]), name)
