"""Check statistical claims by simulation: python scripts/calibrate.py [NAME ...] [--fraction F].

Each module of scripts/calibrations has a ``run(fraction)`` that prints what was claimed and what
was found; `fraction` scales the number of simulated cases (1 is the full calibration).
"""

import argparse
import importlib
import sys
from pathlib import Path

FOLDER = Path(__file__).parent / "calibrations"


def main(arguments: list[str] | None = None) -> int:
    """Run the calibrations named, or all; returns the exit code."""
    names = sorted(path.stem for path in FOLDER.glob("[!_]*.py"))
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", metavar="NAME", help=", ".join(names))
    parser.add_argument("--fraction", type=float, default=1.0, help="of the full number of cases")
    options = parser.parse_args(arguments)
    unknown = sorted(set(options.names) - set(names))
    if unknown:
        parser.error(f"no calibration {', '.join(unknown)}; there are {', '.join(names)}")
    for name in options.names or names:
        print(f"== {name}", flush=True)
        importlib.import_module(f"calibrations.{name}").run(options.fraction)
    return 0


if __name__ == "__main__":
    sys.exit(main())
