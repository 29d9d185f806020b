"""OIFITS files to try things on, built in memory."""

import numpy as np

from orbits.oifits import T3, Array, Corr, Flux, Inspol, OIFile, Target, Vis, Vis2, Wavelength
from orbits.oifits.model import OtherHDU
from orbits.oifits.schema import ExtraColumn

MJD = 61113.0
"""2026-03-14."""
STATIONS = np.array([[0.0, 0, 0], [60, 10, 0], [-20, 90, 0], [45, 120, 5]])
PAIRS = np.array([(i, j) for i in range(1, 5) for j in range(i + 1, 5)])
TRIANGLES = np.array([(1, 2, 3), (1, 2, 4), (1, 3, 4), (2, 3, 4)])


def array(name: str = "SIM", first: int = 1) -> Array:
    """Four stations, numbered from `first`."""
    labels = [f"{name[0]}{k}" for k in range(1, 5)]
    return Array(
        arrname=name,
        tel_name=[f"T{k}" for k in range(1, 5)],
        sta_name=labels,
        sta_index=np.arange(first, first + 4),
        diameter=np.full(4, 1.8),
        staxyz=STATIONS,
    )


def legs(stations: np.ndarray, turn: float = 0.0) -> np.ndarray:
    """(n, 2) u and v of pairs of stations (numbered from 1), the array turned by `turn` rad."""
    c, s = np.cos(turn), np.sin(turn)
    seen = STATIONS[:, :2] @ np.array([[c, s], [-s, c]])
    return seen[stations[:, 1] - 1] - seen[stations[:, 0] - 1]


def rows(value, nwave: int, rng: np.random.Generator, scatter: float) -> np.ndarray:
    """Numbers around `value`, one row a value."""
    return value[:, None] + scatter * rng.standard_normal((len(value), nwave))


def vis2(rng, *, insname="SIM_H", nwave=3, target=1, night=0.0, arrname="SIM", **more) -> Vis2:
    """Squared visibilities of all pairs."""
    u, v = legs(PAIRS, night).T
    return Vis2(
        insname=insname,
        arrname=arrname,
        date_obs="2026-03-14",
        target_id=np.full(6, target),
        mjd=np.full(6, MJD + night),
        int_time=np.full(6, 60.0),
        vis2data=rows(np.full(6, 0.8), nwave, rng, 0.02),
        vis2err=np.full((6, nwave), 0.02),
        ucoord=u,
        vcoord=v,
        sta_index=PAIRS,
        **more,
    )


def t3(rng, *, insname="SIM_H", nwave=3, target=1, night=0.0, arrname="SIM", **more) -> T3:
    """Closure phases of all triangles; amplitudes are not measured."""
    (u1, v1), (u2, v2) = legs(TRIANGLES[:, :2], night).T, legs(TRIANGLES[:, 1:], night).T
    return T3(
        insname=insname,
        arrname=arrname,
        date_obs="2026-03-14",
        target_id=np.full(4, target),
        mjd=np.full(4, MJD + night),
        int_time=np.full(4, 60.0),
        t3phi=rows(np.zeros(4), nwave, rng, 1.0),
        t3phierr=np.full((4, nwave), 1.0),
        u1coord=u1,
        v1coord=v1,
        u2coord=u2,
        v2coord=v2,
        sta_index=TRIANGLES,
        **more,
    )


def vis(rng, *, nwave=3, **more) -> Vis:
    """Differential visibilities of all pairs, as complex coherent fluxes too."""
    u, v = legs(PAIRS).T
    return Vis(
        insname="SIM_H",
        arrname="SIM",
        date_obs="2026-03-14",
        amptyp="absolute",
        phityp="differential",
        phiorder=1,
        target_id=np.full(6, 1),
        mjd=np.full(6, MJD),
        int_time=np.full(6, 60.0),
        visamp=rows(np.full(6, 0.9), nwave, rng, 0.01),
        visamperr=np.full((6, nwave), 0.01),
        visphi=rows(np.zeros(6), nwave, rng, 0.5),
        visphierr=np.full((6, nwave), 0.5),
        visrefmap=np.broadcast_to(~np.eye(nwave, dtype=bool), (6, nwave, nwave)),
        rvis=rows(np.full(6, 3.0), nwave, rng, 0.1),
        rviserr=np.full((6, nwave), 0.1),
        ivis=rows(np.zeros(6), nwave, rng, 0.1),
        iviserr=np.full((6, nwave), 0.1),
        units={"RVIS": "Jy", "RVISERR": "Jy", "IVIS": "Jy", "IVISERR": "Jy"},
        ucoord=u,
        vcoord=v,
        sta_index=PAIRS,
        **more,
    )


def flux(rng, *, nwave=3, raw: bool) -> Flux:
    """Spectra of each station (raw) or of the target."""
    where = {"arrname": "SIM", "sta_index": np.arange(1, 5)} if raw else {"fovtype": "FWHM"}
    n = 4 if raw else 1
    return Flux(
        insname="SIM_H",
        date_obs="2026-03-14",
        calstat="U" if raw else "C",
        target_id=np.full(n, 1),
        mjd=np.full(n, MJD),
        fluxdata=rows(np.full(n, 10.0), nwave, rng, 1.0),
        fluxerr=np.ones((n, nwave)),
        units={"FLUXDATA": "Jy", "FLUXERR": "Jy"},
        **where,
    )


def small(rng: np.random.Generator) -> OIFile:
    """One target, one instrument, one night: 18 squared visibilities and 12 closure phases."""
    return OIFile(
        target=Target(target_id=[1], target=["Harrow 7"], raep0=[84.1], decep0=[-1.2]),
        arrays=[array()],
        wavelengths=[spectrum()],
        data=[vis2(rng), t3(rng)],
    )


def spectrum(insname="SIM_H", nwave=3, start=1.5e-6) -> Wavelength:
    """Channels of 0.05 um from `start`, m."""
    return Wavelength(
        insname=insname,
        eff_wave=start + 5e-8 * np.arange(nwave),
        eff_band=np.full(nwave, 5e-8),
    )


def full(rng: np.random.Generator) -> OIFile:
    """Everything that the standard knows: all tables, two of most, flags, NaN and foreign parts."""
    first = vis2(rng, corrname="NIGHT", corrindx_vis2data=1 + 3 * np.arange(6))
    first.flag[2, 1] = True
    first.vis2data[3, 2] = np.nan
    first.extra["QUALITY"] = ExtraColumn(
        {"TTYPE": "QUALITY", "TFORM": "5B", "TUNIT": "mark"},
        rng.integers(0, 256, (6, 5)).astype(np.uint8),
    )
    descriptors = np.array([(n, 4 * n * (n - 1) // 2) for n in range(6)], dtype=">i4")
    first.extra["MARKS"] = ExtraColumn(
        {"TTYPE": "MARKS", "TFORM": "1PE(5)"}, descriptors.view(np.uint8)
    )
    first.heap = rng.normal(size=15).astype(">f4").tobytes()
    first.cards.append(("MYKEY", 17, "a keyword of ours"))
    phases = t3(
        rng,
        corrname="NIGHT",
        corrindx_t3amp=31 + 3 * np.arange(4),
        corrindx_t3phi=19 + 3 * np.arange(4),
    )
    amplitudes = t3(rng, insname="SIM_K", nwave=1, target=2, night=1.0)
    amplitudes.t3amp[:] = 0.5
    amplitudes.t3amperr[:] = 0.1
    i, j = np.triu_indices(42, 1)
    near = (j - i == 1) & (j % 3 > 0)  # neighbouring channels of a row
    return OIFile(
        target=Target(
            target_id=[1, 2],
            target=["Harrow 7", "Calibrator of it"],
            raep0=[84.1, 85.0],
            decep0=[-1.2, -1.0],
            category=["SCI", "CAL"],
        ),
        arrays=[array(), array("OTHER", first=11)],
        wavelengths=[spectrum(), spectrum("SIM_K", 1, 2.2e-6)],
        data=[
            vis(rng),
            first,
            vis2(rng, insname="SIM_K", nwave=1, target=2, night=1.0),
            phases,
            amplitudes,
            flux(rng, raw=True),
            flux(rng, raw=False),
        ],
        correlations=[
            Corr(
                corrname="NIGHT",
                ndata=42,
                iindx=i[near] + 1,
                jindx=j[near] + 1,
                corr=rng.uniform(-0.5, 0.5, np.count_nonzero(near)),
            )
        ],
        polarisations=[
            Inspol(
                date_obs="2026-03-14",
                npol=1,
                arrname="SIM",
                orient="NORTH",
                model="none to speak of",
                target_id=[1],
                insname=["SIM_H"],
                mjd_obs=[MJD],
                mjd_end=[MJD + 1],
                jxx=np.ones((1, 3)),
                jyy=np.ones((1, 3)) * 1j,
                jxy=np.zeros((1, 3)),
                jyx=np.zeros((1, 3)),
                sta_index=[1],
            )
        ],
        primary={
            "ORIGIN": "nowhere",
            "OBSERVER": "nobody",
            "HIERARCH ESO INS MODE NAME": "of a long name",
        },
        comments=["a comment", "and another"],
        history=["made for a test"],
        others=[foreign(rng)],
    )


def foreign(rng: np.random.Generator) -> OtherHDU:
    """An image that has nothing to do with OIFITS."""
    from io import BytesIO

    from astropy.io import fits

    stream = BytesIO()
    image = fits.ImageHDU(rng.standard_normal((7, 5)), name="PICTURE")
    fits.HDUList([fits.PrimaryHDU(), image]).writeto(stream)
    return OtherHDU("PICTURE", stream.getvalue()[2880:])


def assert_same(one: OIFile, two: OIFile) -> None:
    """Both hold the same tables, bit for bit, apart from TIME, which version 2 has as 0."""
    assert [t.extname for t in one.tables] == [t.extname for t in two.tables]
    for a, b in zip(one.tables, two.tables, strict=True):
        assert_same_table(a, b)
    assert one.others == two.others
    stays = {key: value for key, value in one.primary.items() if key != "DATE"}  # of writing
    assert stays.items() <= two.primary.items()
    assert one.comments == two.comments
    # FITS breaks long lines of history.
    assert "".join(one.history).replace(" ", "") == "".join(two.history).replace(" ", "")


def assert_same_table(a, b) -> None:
    """All columns and keywords are equal, bit for bit."""
    from orbits.oifits.schema import keywords

    assert [c.name for c in a.present] == [c.name for c in b.present], a.label
    for column in a.present:
        x, y = a[column.name], b[column.name]
        assert x.shape == y.shape, column.name
        if column.name == "TIME":
            continue
        same = x.tolist() == y.tolist() if column.code == "A" else x.tobytes() == y.tobytes()
        assert same, f"{a.label} {column.name}"
    for keyword in keywords(type(a)):
        assert a[keyword.name] == b[keyword.name], keyword.name
    assert a.units == b.units
    assert a.cards == b.cards
    assert a.heap == b.heap
    assert {n: (e.cards, e.raw.tobytes()) for n, e in a.extra.items()} == {
        n: (e.cards, e.raw.tobytes()) for n, e in b.extra.items()
    }
