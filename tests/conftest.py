"""What all tests share."""

import os
from pathlib import Path

import numpy as np
import pytest


@pytest.fixture
def rng() -> np.random.Generator:
    """A seeded generator, the same in every run."""
    return np.random.default_rng(20260314)


@pytest.fixture(scope="session")
def outside() -> Path:
    """The folder of files that nobody here wrote; tests that need it skip where it is missing.

    It is ``$NODELINE_DATA``, or ``shared/data`` beside the checkout.
    """
    default = Path(__file__).resolve().parents[2] / "shared" / "data"
    folder = Path(os.environ.get("NODELINE_DATA", default))
    if not folder.is_dir():
        pytest.skip(f"the folder of outside data is missing: {folder}")
    return folder


@pytest.fixture
def nodeline(monkeypatch, capsys):
    """The command line in this process: ``nodeline("predict", ...)`` -> exit code, out, err."""
    from orbits.cli import app
    from orbits.cli.frame import run

    def call(*arguments: object) -> tuple[int, str, str]:
        monkeypatch.setattr("sys.argv", ["nodeline", *map(str, arguments)])
        code = run(app)
        return code, *capsys.readouterr()

    return call
