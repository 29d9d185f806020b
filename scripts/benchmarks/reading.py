"""Reading a file of 200 MB, against loading the same columns with astropy.io.fits."""

import os
import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
from astropy.io import fits

from orbits import read
from orbits.oifits import T3, Array, OIFile, Target, Vis2, Wavelength, load

from . import best_time, row

CHANNELS, ROWS = 1000, 4000
FLAGGED = 0.03


def run() -> None:
    """Print ratios of times and of memory."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "large.fits"
        large_file(np.random.default_rng(1)).write(path)
        size = path.stat().st_size
        unsealed = Path(folder) / "unsealed.fits"
        without_checksums(path, unsealed)
        name = f"{size / 1e6:.0f} MB"
        plain = best_time(lambda: with_astropy(unsealed), repeats=3)
        row(f"{name}: load", best_time(lambda: load(unsealed), repeats=3) / plain, "astropy")
        sealed = best_time(lambda: with_astropy(path, checksum=True), repeats=3)
        row(
            f"{name}: load, checksums verified",
            best_time(lambda: load(path), repeats=3) / sealed,
            "astropy with checksum=True",
        )
        row(
            f"{name}: read with all checks",
            best_time(lambda: read(unsealed), repeats=3) / plain,
            "astropy",
        )
        row(
            f"{name}: the same, checksums verified",
            best_time(lambda: read(path), repeats=3) / sealed,
            "astropy with checksum=True",
        )
        idle = peak_memory(lambda: None)
        for what, work in (("load", load), ("read with all checks", read)):
            taken = peak_memory(lambda work=work: work(path)) - idle
            row(f"{name}: memory of {what}", taken / size, "the file")


def with_astropy(path: Path, *, checksum: bool = False) -> list[np.ndarray]:
    """All columns of all tables in the computer's own byte order."""
    with fits.open(path, memmap=False, checksum=checksum) as opened:
        return [
            np.ascontiguousarray(hdu.data[name], dtype=hdu.data[name].dtype.newbyteorder("="))
            for hdu in opened[1:]
            for name in hdu.columns.names
        ]


def peak_memory(work: Callable[[], object]) -> int:
    """Largest resident memory of a child process that does `work`, bytes."""
    child = os.fork()
    if child == 0:
        work()
        os._exit(0)
    _, _, usage = os.wait4(child, 0)
    return usage.ru_maxrss * 1024


def without_checksums(path: Path, copy: Path) -> None:
    """A copy of a file without checksums: verifying them is work of its own."""
    with fits.open(path, memmap=False) as opened:
        for hdu in opened:
            hdu.header.pop("CHECKSUM", None)
            hdu.header.pop("DATASUM", None)
        opened.writeto(copy)


def large_file(rng: np.random.Generator) -> OIFile:
    """One night of a spectrograph: squared visibilities and closure phases, some of them bad."""
    grid = (ROWS, CHANNELS)
    bad = rng.random((2, *grid)) < FLAGGED
    common = {
        "insname": "SPECTROGRAPH",
        "arrname": "SIM",
        "date_obs": "2026-03-14",
        "target_id": np.ones(ROWS),
        "mjd": 61113 + np.linspace(0, 0.3, ROWS),
    }
    u, v = rng.uniform(20, 60, (2, ROWS))
    return OIFile(
        target=Target(target_id=[1], target=["Harrow 7"]),
        arrays=[Array(arrname="SIM", tel_name=["1", "2", "3"], sta_name=["1", "2", "3"],
                      sta_index=[1, 2, 3])],
        wavelengths=[
            Wavelength(
                insname="SPECTROGRAPH",
                eff_wave=np.linspace(2.0e-6, 2.4e-6, CHANNELS),
                eff_band=np.full(CHANNELS, 4e-10),
            )
        ],
        data=[
            Vis2(
                **common,
                vis2data=rng.normal(0.5, 0.1, grid),
                vis2err=np.full(grid, 0.1),
                flag=bad[0],
                ucoord=u,
                vcoord=v,
                sta_index=np.tile([1, 2], (ROWS, 1)),
            ),
            T3(
                **common,
                t3amp=rng.normal(0.5, 0.1, grid),
                t3amperr=np.full(grid, 0.1),
                t3phi=rng.normal(0, 1, grid),
                t3phierr=np.ones(grid),
                flag=bad[1],
                u1coord=u,
                v1coord=v,
                u2coord=-0.3 * u,
                v2coord=0.5 * v,
                sta_index=np.tile([1, 2, 3], (ROWS, 1)),
            ),
        ],
    )  # fmt: skip
