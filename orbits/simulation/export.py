"""A simulated night as an OIFITS file."""

import numpy as np

from ..observation import Exposures, Observation
from ..oifits import T3, Corr, OIFile, Target, Vis2, Wavelength
from ..oifits import Array as OIArray
from ..times import date_of_utc
from .array import Array
from .nights import Spectrum

CORRNAME = "SHARED"


def night_file(
    observation: Observation, array: Array, spectrum: Spectrum, *, ra: float, dec: float
) -> OIFile:
    """The file of one simulated night: whole rows of all channels, as `observe` makes them."""
    linked = observation.correlation is not None
    common = {
        "insname": spectrum.name,
        "arrname": array.name,
        "date_obs": date_of_utc(observation.mjd),
        "corrname": CORRNAME if linked else None,
    }
    n_v2, channels = len(observation.v2), len(spectrum.wavelength)
    v2, t3 = observation.v2, observation.t3
    data = [
        Vis2(
            **common,
            **_rows(v2.exposures, ("ucoord", "vcoord")),
            vis2data=v2.value.reshape(-1, channels),
            vis2err=v2.error.reshape(-1, channels),
            corrindx_vis2data=1 + np.arange(0, n_v2, channels) if linked else None,
        )
    ]
    if len(t3):
        # Amplitudes of the bispectrum are not simulated; the standard's mark for that is NaN.
        # Their numbers in the correlation matrix follow those of all other data.
        data.append(
            T3(
                **common,
                **_rows(t3.exposures, ("u1coord", "v1coord", "u2coord", "v2coord")),
                t3phi=np.degrees(t3.value).reshape(-1, channels),
                t3phierr=np.degrees(t3.error).reshape(-1, channels),
                corrindx_t3phi=1 + n_v2 + np.arange(0, len(t3), channels) if linked else None,
                corrindx_t3amp=1 + n_v2 + len(t3) + np.arange(0, len(t3), channels)
                if linked
                else None,
            )
        )
    return OIFile(
        target=Target(
            target_id=[1], target=[observation.target], raep0=[ra], decep0=[dec], category=["SCI"]
        ),
        arrays=[_stations(array)],
        wavelengths=[
            Wavelength(
                insname=spectrum.name, eff_wave=spectrum.wavelength, eff_band=spectrum.bandwidth
            )
        ],
        data=data,
        correlations=[_correlation(observation)] if linked else [],
        primary={
            "ORIGIN": "Nodeline",
            "OBSERVER": "simulated",
            "INSMODE": "simulated",
            "TELESCOP": array.name,
            "INSTRUME": spectrum.name,
            "OBJECT": observation.target,
        },
        history=["Simulated by nodeline"],
    )


def _rows(exposures: Exposures, names: tuple[str, ...]) -> dict[str, np.ndarray]:
    """The columns that have one value a row."""
    return {
        "target_id": np.ones(len(exposures)),
        "mjd": exposures.mjd,
        "int_time": exposures.integration,
        "sta_index": exposures.stations + 1,
        **dict(zip(names, exposures.legs.reshape(len(exposures), -1).T, strict=True)),
    }


def _stations(array: Array) -> OIArray:
    n = len(array.stations)
    x, y, z = array.centre
    return OIArray(
        arrname=array.name,
        arrayx=x,
        arrayy=y,
        arrayz=z,
        tel_name=array.stations,
        sta_name=array.stations,
        sta_index=1 + np.arange(n),
        diameter=np.full(n, array.diameter),
        staxyz=array.geocentric,
    )


def _correlation(observation: Observation) -> Corr:
    """Elements above the diagonal; data are numbered from 1, V2 before closure phases."""
    from scipy import sparse

    upper = sparse.triu(observation.correlation, k=1).tocoo()
    return Corr(
        corrname=CORRNAME,
        ndata=len(observation.v2) + 2 * len(observation.t3),
        iindx=upper.row + 1,
        jindx=upper.col + 1,
        corr=upper.data,
    )
