"""All benchmarks with one command: python tests/bench/run.py [--quick] [--out FILE] [NAME ...]

Each bench_NAME.py beside this file has `rows(quick) -> list[dict]`. Prints a table per benchmark and writes all rows,
with facts on the machine, as JSON (default: bench.json in the current folder). Every benchmark runs in its own process.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import subprocess
import sys
from pathlib import Path

FOLDER = Path(__file__).resolve().parent
CHILD = """import json, sys
sys.path.insert(0, {folder!r})
import {module} as bench
print("ROWS" + json.dumps(bench.rows({quick})))"""


def names() -> list[str]:
    return sorted(path.stem.removeprefix("bench_") for path in FOLDER.glob("bench_*.py"))


def run_one(name: str, *, quick: bool) -> list[dict[str, object]]:
    code = CHILD.format(folder=str(FOLDER), module=f"bench_{name}", quick=quick)
    done = subprocess.run([sys.executable, "-c", code], stdout=subprocess.PIPE, text=True, check=False)
    lines = [line for line in done.stdout.splitlines() if line.startswith("ROWS")]
    if done.returncode or not lines:
        sys.exit(f"Benchmark {name} failed.")
    return json.loads(lines[-1].removeprefix("ROWS"))


def show(name: str, rows: list[dict[str, object]]) -> None:
    columns = list(dict.fromkeys(key for row in rows for key in row))
    cells = [columns, *([_text(row.get(column)) for column in columns] for row in rows)]
    widths = [max(len(row[i]) for row in cells) for i in range(len(columns))]
    print(f"\n{name}")
    for row in cells:
        print(
            "  ".join(
                cell.rjust(width) if i else cell.ljust(width)
                for i, (cell, width) in enumerate(zip(row, widths, strict=True))
            )
        )


def _text(value: object) -> str:
    if isinstance(value, float):
        return f"{value:,.0f}" if abs(value) >= 1000 else f"{value:.3g}"
    return "" if value is None else str(value)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("names", nargs="*", metavar="NAME", help=f"which: {', '.join(names())} (default: all)")
    parser.add_argument("--quick", action="store_true", help="smaller work, to see that everything runs")
    parser.add_argument("--out", type=Path, default=Path("bench.json"))
    options = parser.parse_args()
    unknown = set(options.names) - set(names())
    if unknown:
        parser.error(f"no benchmark {', '.join(sorted(unknown))}; there are {', '.join(names())}")
    results = {}
    for name in options.names or names():
        results[name] = run_one(name, quick=options.quick)
        show(name, results[name])
    machine = {"cores": os.cpu_count(), "system": platform.platform(), "python": platform.python_version()}
    options.out.write_text(json.dumps({"machine": machine, "results": results}, indent=2) + "\n", encoding="utf-8")
    print(f"\nWritten: {options.out}")


if __name__ == "__main__":
    main()
