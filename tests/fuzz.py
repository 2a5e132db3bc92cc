"""Run the properties of `fuzz_properties.py` for as long as there is time: python tests/fuzz.py --minutes 10 [NAME ...]

Ends with a table of examples and of what was accepted; with 1 if any property failed, after showing its smallest input.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
import time
import traceback
from pathlib import Path

from fuzz_properties import PROPERTIES, Property, World
from hypothesis import HealthCheck, Phase, given, seed, settings


def examine(found: Property, world: World, examples: int, number: int | None = None) -> int:
    """Try so many inputs on a property; returns how many were tried. number: a seed, for the same ones again."""
    tried = 0

    # Without a search for which parts of an input matter, which takes minutes.
    phases = (Phase.explicit, Phase.generate, Phase.shrink)

    @settings(
        max_examples=examples, deadline=None, database=None, phases=phases, suppress_health_check=list(HealthCheck)
    )
    @given(found.strategy)
    def one(value: object) -> None:
        nonlocal tried
        tried += 1
        found.check(world, value)

    (one if number is None else seed(number)(one))()
    return tried


def main() -> int:
    """Run round by round."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--minutes", type=float, default=10)
    parser.add_argument("names", nargs="*", choices=[*PROPERTIES, []], metavar="NAME")
    asked = parser.parse_args()
    tried, failed = dict.fromkeys(asked.names or PROPERTIES, 0), set()
    end, number = time.monotonic() + 60 * asked.minutes, int(time.time())
    with tempfile.TemporaryDirectory() as folder:
        world = World(Path(folder))
        while time.monotonic() < end and len(failed) < len(tried):
            number += 1
            for name in tried:
                if name in failed or time.monotonic() > end:
                    continue
                try:
                    tried[name] += examine(PROPERTIES[name], world, 5 * PROPERTIES[name].quick, number)
                except Exception:  # the property's own failure, whatever it is, is what is looked for
                    failed.add(name)
                    print(f"--- {name}, seed {number}\n{traceback.format_exc()[-3000:]}", flush=True)
    for name, count in tried.items():
        print(f"{name:<16}{count:>8} examples{'  FAILED' if name in failed else ''}")
    print(", ".join(f"{count} {what}" for what, count in sorted(world.seen.items())))
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
