"""What an installed copy brings along, and how quickly it answers."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

import orbits

ROOT = Path(__file__).resolve().parents[1]


def python(*arguments, **options):
    return subprocess.run(
        [sys.executable, *arguments], check=True, capture_output=True, text=True, **options
    ).stdout


@pytest.fixture(scope="module")
def installed(tmp_path_factory):
    """The folder of a plain installation from a wheel built of this tree."""
    pytest.importorskip("hatchling", reason="hatchling is needed to build a wheel offline")
    folder = tmp_path_factory.mktemp("wheel")
    pip = ("-m", "pip", "--disable-pip-version-check", "--quiet", "--no-input")
    build = ("wheel", "--no-deps", "--no-build-isolation", "--wheel-dir", str(folder), str(ROOT))
    python(*pip, *build)
    (wheel,) = folder.glob("nodeline-*.whl")
    python(*pip, "install", "--no-deps", "--no-index", "--target", str(folder / "site"), str(wheel))
    return folder / "site"


def test_the_wheel_brings_every_catalogue_and_the_demo(installed):
    for path in (ROOT / "catalogs").glob("*.ecsv"):
        assert (installed / "orbits" / "catalogs" / path.name).read_bytes() == path.read_bytes()
    assert (installed / "orbits" / "demo" / "harrow-7.toml").is_file()
    for name in ("page.html", "page.css", "page.js"):
        assert (installed / "orbits" / "report" / "templates" / name).is_file()
    assert sorted(path.name for path in installed.iterdir() if path.suffix != ".dist-info") == [
        "bin",
        "orbits",
    ]


def test_an_installed_copy_finds_its_catalogues(installed, tmp_path):
    environment = {**os.environ, "PYTHONPATH": str(installed)}
    out = python("-m", "orbits", "catalogue", "list", "--json", cwd=tmp_path, env=environment)
    where = python("-c", "import orbits; print(orbits.__file__)", cwd=tmp_path, env=environment)
    assert Path(where.strip()).is_relative_to(installed)
    assert json.loads(out)


def test_public_names_exist():
    for name in orbits.__all__:
        assert getattr(orbits, name).__name__ == name
    with pytest.raises(AttributeError, match="no attribute 'frobnicate'"):
        orbits.frobnicate  # noqa: B018


def test_help_needs_no_heavy_import():
    """The libraries that take long to import are not touched before they are needed."""
    code = """
import sys
from orbits.cli import app
from orbits.cli.frame import run
sys.argv = ["nodeline", "--help"]
assert run(app) == 0
heavy = ["numpy", "scipy", "astropy", "matplotlib", "pandas", "dynesty", "finufft", "numba"]
print([name for name in heavy if name in sys.modules], file=sys.stderr)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stderr.strip() == "[]"
    assert "search" in done.stdout
