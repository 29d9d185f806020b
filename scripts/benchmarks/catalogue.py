"""Catalogues of ten thousand orbits, ephemerides of two thousand, and drawings."""

import io
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np

from . import best_time, row


def run() -> None:
    """Print the costs of the commands' work as ratios to plainer work of the same kind."""
    from astropy.table import Table
    from matplotlib.figure import Figure

    from orbits.bundle import Orbits
    from orbits.catalogue import Catalogue, find_entry
    from orbits.ephemeris import predict
    from orbits.plots.sky import draw_sky

    entry = find_entry("Capella", "published")
    rng = np.random.default_rng(1)
    many = Catalogue.of([replace(entry, solution=f"{n}") for n in range(10_000)])
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "many.ecsv"
        many.write(path)
        bare = best_time(lambda: Table.read(path, format="ascii.ecsv"), repeats=3)
        whole = best_time(lambda: Catalogue.read(path), repeats=3)
    row("read and check a catalogue of 10 000 orbits", whole / bare, "astropy's Table.read of it")

    entries = list(many.select(match="capella"))[:2000]
    mjd = np.array([61375.0])

    def each() -> None:
        for one in entries:
            predict(one.bundle(rng), mjd)

    draws = Orbits.of({name: np.repeat(entry.number(name), 800_000) for name in Orbits.names()})
    bare = best_time(lambda: draws.offsets(mjd), repeats=3)
    cost = best_time(each, repeats=1)
    row("predict 2000 entries with errors (400 orbits each)", cost / bare, "800 000 bare positions")

    bundle = entry.bundle(rng)

    def paint(drawing: Figure) -> None:
        drawing.savefig(io.BytesIO(), format="png", dpi=300)

    def empty() -> None:
        drawing = Figure(figsize=(3.3, 4.0), layout="constrained")
        drawing.add_subplot()
        paint(drawing)

    cost = best_time(lambda: paint(draw_sky(bundle)), repeats=3)
    row("draw an orbit on the sky", cost / best_time(empty, repeats=3), "a drawing of empty axes")
