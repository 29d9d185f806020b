"""How long a person waits for the first answer."""

import subprocess
import sys

from . import best_time, row


def run() -> None:
    """Compare ``nodeline --help`` with an interpreter that does nothing."""
    bare = best_time(lambda: subprocess.run([sys.executable, "-c", ""], check=True))
    answer = best_time(
        lambda: subprocess.run(
            [sys.executable, "-m", "orbits", "--help"], check=True, stdout=subprocess.DEVNULL
        )
    )
    row("nodeline --help", answer / bare, f"a bare interpreter ({answer - bare:.2f} s more)")
