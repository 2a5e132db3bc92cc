"""From a fresh clone to the report of the sample project, with one command: python3 sample_project/start.py"""

from __future__ import annotations

import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / ".ci"))

from environment import environment, run  # noqa: E402 - found only after the path is set

if __name__ == "__main__":
    sys.exit(run(environment(), "-m", "classify", "run", "--project", "sample_project", *sys.argv[1:]))
