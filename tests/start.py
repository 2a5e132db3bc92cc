"""From a fresh clone to a passing test suite, with one command: python3 tests/start.py [pytest options]"""

from __future__ import annotations

import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / ".ci"))

from environment import environment, run  # noqa: E402 - found only after the path is set

if __name__ == "__main__":
    sys.exit(run(environment("test"), "-m", "pytest", "-n", "auto", *sys.argv[1:]))
