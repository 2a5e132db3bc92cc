"""From a fresh clone to a passing test suite, with one command: python3 tests/start.py [pytest options]

With --oldest as the first option: the oldest supported versions of all dependencies, in an environment of their own,
and a few tests of what is asked of each.
"""

from __future__ import annotations

import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / ".ci"))

from environment import environment, run  # noqa: E402 - found only after the path is set

TOOLS = ("httpx", "hypothesis", "jsonschema", "openpyxl", "psutil", "pypdf", "pytest")
# Every dependency is used by one of these.
OLDEST_TESTS = (
    "test_cli_main.py", "test_features_compiled.py", "test_files.py", "test_interpret_access.py",
    "test_mapping_cluster.py", "test_mapping_vector.py", "test_models_fit.py", "test_models_store.py",
    "test_report_forms.py", "test_sample_files.py", "test_settings.py", "test_workflow.py",
)  # fmt: skip


def oldest() -> int:
    """Run the tests with the oldest versions; returns the exit code."""
    if sys.version_info[:2] != (3, 11):
        sys.exit("The oldest versions are those for Python 3.11: run this with it.")
    constraints = ROOT / "tests" / "constraints-oldest.txt"
    python = environment("cluster", folder=".venv-oldest", constraints=constraints, tools=TOOLS)
    return run(python, "-m", "pytest", *(f"tests/{name}" for name in OLDEST_TESTS), *sys.argv[2:])


if __name__ == "__main__":
    if sys.argv[1:2] == ["--oldest"]:
        sys.exit(oldest())
    sys.exit(run(environment("test"), "-m", "pytest", "-n", "auto", *sys.argv[1:]))
