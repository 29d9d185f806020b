"""Measure speed as ratios against a baseline of the same run: python scripts/bench.py [NAME ...].

Each module of scripts/benchmarks has a ``run()`` that prints its rows.
"""

import importlib
import sys
from pathlib import Path

FOLDER = Path(__file__).parent / "benchmarks"


def main(wanted: list[str]) -> int:
    """Run the benchmarks named, or all; returns the exit code."""
    names = sorted(path.stem for path in FOLDER.glob("[!_]*.py"))
    unknown = sorted(set(wanted) - set(names))
    if unknown:
        print(f"no benchmark {', '.join(unknown)}; there are {', '.join(names)}", file=sys.stderr)
        return 2
    for name in wanted or names:
        print(f"== {name}", flush=True)
        importlib.import_module(f"benchmarks.{name}").run()
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
