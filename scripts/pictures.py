"""Make the small pictures of the README: python scripts/pictures.py.

The demonstration is run in a temporary folder, and its drawings are written to scripts/pictures in
few colours, under 300 kB together. The page of the report is photographed by a headless Chromium
and left as it is where there is none.
"""

import io
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from matplotlib.figure import Figure

FOLDER = Path(__file__).parent / "pictures"
LIMIT = 300_000
"""Bytes, together."""
DPI = 140
COLOURS = 128


def main() -> int:
    """Make all pictures; returns the exit code."""
    FOLDER.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory() as folder:
        system = _demonstrate(Path(folder))
        for name, drawing in _drawings(system).items():
            _keep(drawing, FOLDER / f"{name}.png")
        _photograph(system, FOLDER / "report.png")
    sizes = {path.name: path.stat().st_size for path in sorted(FOLDER.glob("*.png"))}
    for name, size in sizes.items():
        print(f"{name:<16} {size / 1000:6.1f} kB")
    print(f"{'together':<16} {sum(sizes.values()) / 1000:6.1f} kB")
    return 0 if sum(sizes.values()) < LIMIT else 1


def _demonstrate(folder: Path):
    """The demonstration's system, measured and fitted."""
    from orbits.cli.demo import demo
    from orbits.system import read_system

    demo(output=folder, seed=7)
    (path,) = folder.glob("*.toml")
    return read_system(path)


def _drawings(system) -> "dict[str, Figure]":
    import numpy as np

    from orbits.bundle import Bundle
    from orbits.catalogue import Catalogue, packaged_catalogues
    from orbits.companion.search import search
    from orbits.fitting.solution import Solution
    from orbits.oifits import read
    from orbits.plots.field import draw_field
    from orbits.plots.sheet import draw_sheet
    from orbits.plots.sky import draw_sky
    from orbits.plots.velocity import draw_velocities

    rng = np.random.default_rng(7)
    bundle = Bundle.of_solution(Solution.read(system.results))
    published = list(Catalogue.read(packaged_catalogues()["published"]))[:8]
    return {
        "orbit": draw_sky(bundle),
        "velocity": draw_velocities(bundle),
        "night": draw_field(search(read(system.nights[0]), rng=rng), columns=2),
        "catalogue": draw_sheet([entry.bundle(rng) for entry in published]),
    }


def _keep(drawing: "Figure", path: Path) -> None:
    stream = io.BytesIO()
    drawing.savefig(stream, format="png", dpi=DPI)
    _few_colours(stream.getvalue(), path)


def _few_colours(png: bytes, path: Path, *, width: int | None = None) -> None:
    """Write a picture, made narrower if wanted, with a palette of few colours."""
    from PIL import Image

    image = Image.open(io.BytesIO(png)).convert("RGB")
    if width is not None:
        image = image.resize((width, round(image.height * width / image.width)), Image.LANCZOS)
    # This method keeps colours that few pixels have, such as those of the measured positions.
    few = image.quantize(COLOURS, method=Image.Quantize.MAXCOVERAGE, dither=Image.Dither.NONE)
    few.save(path, optimize=True)


def _photograph(system, path: Path) -> None:
    """The upper part of the report as a browser shows it."""
    chromium = shutil.which("chromium")
    if chromium is None:
        print("chromium is not installed; the picture of the report stays as it is")
        return
    from orbits.report import write_report

    page, photo = system.results / "report.html", system.results / "report.png"
    write_report(system, page, seed=7)
    flags = ["--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars"]
    options = ["--window-size=1200,1010", f"--screenshot={photo}"]
    subprocess.run([chromium, *flags, *options, page.as_uri()], check=True, capture_output=True)
    _few_colours(photo.read_bytes(), path, width=800)


if __name__ == "__main__":
    sys.exit(main())
