"""Faulty files: each fault is named, with what was done, and what was done is true."""

import numpy as np
import oifits_files as make
import pytest
from astropy.io import fits

from orbits import InputError, read
from orbits.oifits import Flux, Target, Wavelength, load
from orbits.oifits.checking import check
from orbits.problems import Severity

NOTE, SUSPICIOUS, UNUSABLE = Severity.NOTE, Severity.SUSPICIOUS, Severity.UNUSABLE
KEPT = (18, 12)
"""Squared visibilities and closure phases of `make.small` when nothing is left out."""


def damaged(rng, tmp_path, edit, *, make_file=make.small):
    """The path of a valid file after `edit`, a function of the opened file."""
    path = tmp_path / "night.fits"
    make_file(rng).write(tmp_path / "sound.fits")
    with fits.open(tmp_path / "sound.fits") as opened:
        edit(opened)
        for hdu in opened:
            hdu.header.pop("CHECKSUM", None)
            hdu.header.pop("DATASUM", None)
        opened.writeto(path)
    return path


def values(name, column, value, where=(0, 0)):
    """An edit that sets one value."""

    def edit(opened):
        opened[name].data[column][where] = value

    return edit


def every(name, column, change):
    """An edit that changes a whole column."""

    def edit(opened):
        opened[name].data[column][:] = change(opened[name].data[column])

    return edit


def keyword(name, key, value):
    """An edit that sets a keyword, or removes it."""

    def edit(opened):
        if value is None:
            del opened[name].header[key]
        else:
            opened[name].header[key] = value

    return edit


def unit(name, column, value):
    """An edit that sets the unit of a column."""

    def edit(opened):
        opened[name].columns[column].unit = value

    return edit


def column(name, old, form, change, new=None, unit=None):
    """An edit that writes a column in another form, under another name, in another unit."""

    def edit(opened):
        place = opened.index_of(name)
        table = opened[place]
        columns = [
            fits.Column(new or c.name, form, unit=unit, array=change(table.data[old]))
            if c.name == old
            else fits.Column(c.name, c.format, unit=c.unit, array=table.data[c.name])
            for c in table.columns
        ]
        opened[place] = fits.BinTableHDU.from_columns(columns, name=name)
        kept = ("OI_REVN", "DATE-OBS", "ARRNAME", "INSNAME")
        opened[place].header.update({key: table.header[key] for key in kept})

    return edit


def one_flagged(flags):
    flags = flags.copy()
    flags[2, 1] = True
    return flags


def with_null(name, old, form, null, where, scale=None):
    """An edit that writes a column in whole numbers, one of them NULL, perhaps scaled."""

    def stored(values):
        whole = np.round(values / (scale or 1)).astype(int)
        whole[where] = null
        return whole

    def edit(opened):
        column(name, old, form, stored)(opened)
        number = opened[name].columns.names.index(old) + 1
        opened[name].header[f"TNULL{number}"] = null
        if scale:
            opened[name].header[f"TSCAL{number}"] = scale

    return edit


def _twice(declination):
    """An edit that adds a second row for the target, which stands at RA 84.1, Dec -1.2 deg."""

    def edit(opened):
        place = opened.index_of("OI_TARGET")
        table = opened[place]
        rows = np.concatenate([table.data, table.data])
        rows["DECEP0"][1] = declination
        opened[place] = fits.BinTableHDU(rows, header=table.header)

    return edit


FAULTS = {
    "NULL in scaled data": (
        with_null("OI_VIS2", "VIS2DATA", "3I", -32768, (1, 2), 1e-4),
        NOTE, r"VIS2DATA: 1 values are NULL", (17, 12),
    ),
    "NULL in scaled errors": (
        with_null("OI_T3", "T3PHIERR", "3J", 0, (slice(None), 0), 1e-4),
        NOTE, r"T3PHIERR: 4 values are NULL", (18, 8),
    ),
    "NULL in whole times": (
        with_null("OI_VIS2", "MJD", "K", 99, 0), NOTE, r"MJD: 1 values are NULL", (15, 12),
    ),
    "NULL in flags": (
        with_null("OI_VIS2", "FLAG", "3B", 0, (slice(None), 0)), NOTE, r"holds numbers", (0, 12),
    ),
    "no target": (
        with_null("OI_VIS2", "TARGET_ID", "I", 99, 0),
        UNUSABLE, r"1 rows have TARGET_ID -32768", (15, 12),
    ),
    "a number that stands for NULL": (
        with_null("OI_T3", "TARGET_ID", "B", 1, 0), NOTE, r"TARGET_ID: 4 values are NULL", (18, 0),
    ),
    "no target beside senseless ones": (
        lambda opened: [
            with_null("OI_VIS2", "TARGET_ID", "I", 99, 0)(opened),
            opened["OI_VIS2"].header.set("TSCAL1", 1e300),
        ],
        UNUSABLE, r"TARGET_ID has numbers beyond 32 bits", (0, 12),
    ),
    "no station": (
        with_null("OI_VIS2", "STA_INDEX", "2I", -1, (0, 1)),
        SUSPICIOUS, r"1 entries, such as -32768", KEPT,
    ),
    "flags as numbers": (
        column("OI_VIS2", "FLAG", "3I", one_flagged), NOTE, r"FLAG holds numbers", (17, 12),
    ),
    "flags as text": (
        column("OI_VIS2", "FLAG", "3A", lambda f: np.full(len(f), "FTF")),
        UNUSABLE, r"FLAG has the form '3A', not L", (0, 12),
    ),
    "(u, v) in millions of wavelengths": (
        unit("OI_VIS2", "VCOORD", "Mlambda"),
        UNUSABLE, r"VCOORD has the unit 'Mlambda', which is no length", (0, 12),
    ),
    "negative error": (
        values("OI_VIS2", "VIS2ERR", -0.02, (1, 2)),
        UNUSABLE, r"VIS2ERR is negative in row 2, channel 3", (17, 12),
    ),
    "error 0": (
        values("OI_T3", "T3PHIERR", 0.0), UNUSABLE, r"T3PHIERR is 0 in row 1, channel 1", (18, 11),
    ),
    "infinite error": (
        values("OI_VIS2", "VIS2ERR", np.inf), UNUSABLE, r"VIS2ERR is infinite", (17, 12),
    ),
    "NaN": (values("OI_VIS2", "VIS2DATA", np.nan), NOTE, r"VIS2DATA or VIS2ERR is NaN", (17, 12)),
    "infinite datum": (
        values("OI_VIS2", "VIS2DATA", np.inf), UNUSABLE, r"VIS2DATA is infinite", (17, 12),
    ),
    "errors beyond belief": (
        every("OI_VIS2", "VIS2ERR", lambda e: e * 1e-6),
        SUSPICIOUS, r"VIS2ERR is typically 2e-08", KEPT,
    ),
    "errors far below the scatter between channels": (
        every("OI_T3", "T3PHIERR", lambda e: e * 1e-3),
        SUSPICIOUS, r"T3PHIERR is \d+ times smaller than the scatter between neighb", KEPT,
    ),
    "everything flagged": (
        values("OI_T3", "FLAG", True, slice(None)), SUSPICIOUS, r"every datum is fl", (18, 0),
    ),
    "V2 far above 1": (
        values("OI_VIS2", "VIS2DATA", 1.9), SUSPICIOUS, r"far outside 0 to 1 in row 1", KEPT,
    ),
    "V2 far below 0": (
        values("OI_VIS2", "VIS2DATA", -0.9), SUSPICIOUS, r"far outside 0 to 1 in row 1", KEPT,
    ),
    "useless phase": (
        values("OI_T3", "T3PHIERR", 100.0), NOTE, r"T3PHIERR exceeds 60 deg", KEPT,
    ),
    "wavelengths reversed": (
        every("OI_WAVELENGTH", "EFF_WAVE", lambda w: w[::-1].copy()),
        NOTE, r"EFF_WAVE descends", KEPT,
    ),
    "wavelengths in disorder": (
        every("OI_WAVELENGTH", "EFF_WAVE", lambda w: w[[1, 0, 2]]),
        SUSPICIOUS, r"EFF_WAVE is not in order", KEPT,
    ),
    "two equal channels": (
        every("OI_WAVELENGTH", "EFF_WAVE", lambda w: w[[0, 0, 2]]),
        SUSPICIOUS, r"two channels have the same EFF_WAVE", KEPT,
    ),
    "band wider than wavelength": (
        values("OI_WAVELENGTH", "EFF_BAND", 2e-6, 1),
        SUSPICIOUS, r"EFF_BAND of channel 2 .* is not less", KEPT,
    ),
    "no width": (
        values("OI_WAVELENGTH", "EFF_BAND", 0.0, 1), NOTE, r"EFF_BAND of 1 channels", KEPT,
    ),
    "one channel without wavelength": (
        values("OI_WAVELENGTH", "EFF_WAVE", 0.0, 1),
        UNUSABLE, r"is 0 m in 1 channels: no optical wavelength", (12, 8),
    ),
    "time is 0": (
        values("OI_VIS2", "MJD", 0.0, slice(None)), SUSPICIOUS, r"6 rows have no time", None,
    ),
    "time is NaN": (
        values("OI_VIS2", "MJD", np.nan, 0), UNUSABLE, r"1 rows have no time", (15, 12),
    ),
    "Julian date": (
        every("OI_VIS2", "MJD", lambda t: t + 2400000.5),
        SUSPICIOUS, r"6 rows hold a Julian date \(2461113\.500\)", KEPT,
    ),
    "(u, v) of one row": (
        values("OI_VIS2", "UCOORD", 4e7, 0), UNUSABLE, r"1 rows have a baseline of 4e", (15, 12),
    ),
    "baseline longer than the array": (
        values("OI_VIS2", "UCOORD", 400.0, 0), SUSPICIOUS, r"longer than the distance", KEPT,
    ),
    "sides of a triangle": (
        values("OI_T3", "U1COORD", 3.0, 2), SUSPICIOUS, r"of 1 rows \(first: row 3\)", KEPT,
    ),
    "no baselines": (
        lambda opened: [every("OI_VIS2", c, lambda x: 0 * x)(opened) for c in ("UCOORD", "VCOORD")],
        SUSPICIOUS, r"\(u, v\) are 0, 0 in 6 rows \(first: row 1\)", KEPT,
    ),
    "unknown station": (
        values("OI_VIS2", "STA_INDEX", 9, (0, 1)), SUSPICIOUS, r"1 entries, such as 9", KEPT,
    ),
    "the same station twice": (
        values("OI_VIS2", "STA_INDEX", 1, (0, 1)), SUSPICIOUS, r"row 1 has the same station", KEPT,
    ),
    "unknown target": (
        values("OI_VIS2", "TARGET_ID", 7, 0), UNUSABLE, r"1 rows have TARGET_ID 7", (15, 12),
    ),
    "unknown INSNAME": (
        keyword("OI_VIS2", "INSNAME", "GONE"), UNUSABLE, r"INSNAME 'GONE' has no OI_W", (0, 12),
    ),
    "INSNAME in other letters": (
        keyword("OI_VIS2", "INSNAME", "sim_h"), NOTE, r"INSNAME is 'sim_h', not 'SIM_H'", KEPT,
    ),
    "unknown ARRNAME": (
        keyword("OI_VIS2", "ARRNAME", "GONE"), SUSPICIOUS, r"ARRNAME 'GONE' has no table", KEPT,
    ),
    "unknown CORRNAME": (
        keyword("OI_VIS2", "CORRNAME", "GONE"), SUSPICIOUS, r"CORRNAME 'GONE' has no", KEPT,
    ),
    "no OI_REVN": (keyword("OI_VIS2", "OI_REVN", None), NOTE, r"OI_REVN is missing", KEPT),
    "OI_REVN of version 1": (
        keyword("OI_VIS2", "OI_REVN", 1), SUSPICIOUS, r"OI_REVN is 1, not 2", KEPT,
    ),
    "no OI_ARRAY": (
        lambda opened: opened.pop("OI_ARRAY"), SUSPICIOUS, r"there is no OI_ARRAY", KEPT,
    ),
    "no DATE-OBS": (keyword("OI_VIS2", "DATE-OBS", None), NOTE, r"DATE-OBS is missing", KEPT),
    "ids of 0": (values("OI_ARRAY", "STA_INDEX", 0, 3), NOTE, r"STA_INDEX has numbers below", KEPT),
    "TIME in version 2": (values("OI_VIS2", "TIME", 5.0, 0), NOTE, r"TIME is not 0", KEPT),
    "V2 in an odd unit": (
        unit("OI_VIS2", "VIS2DATA", "Jy"), SUSPICIOUS, r"VIS2DATA has the unit 'Jy'", KEPT,
    ),
    "unit of no unit": (
        unit("OI_VIS2", "VIS2ERR", "0.01"), SUSPICIOUS, r"VIS2ERR has the unit '0.01'", KEPT,
    ),
    "a target twice at two places": (
        _twice(declination=48.8), SUSPICIOUS, r"TARGET_ID 1 appears twice, 50 deg apart", KEPT,
    ),
    "a target twice": (_twice(declination=-1.201), NOTE, r"TARGET_ID 1 appears twice$", KEPT),
    "odd unit": (unit("OI_T3", "T3PHI", "furlong"), SUSPICIOUS, r"the unit 'furlong'", KEPT),
    "odd FRAME": (keyword("OI_ARRAY", "FRAME", "LOCAL"), NOTE, r"FRAME is 'LOCAL'", KEPT),
    "OI_T3 without phases": (
        lambda opened: opened["OI_T3"].columns.change_name("T3PHI", "PHASE"),
        UNUSABLE, r"column T3PHI is missing", (18, 0),
    ),
}  # fmt: skip


@pytest.mark.parametrize(("edit", "severity", "words", "kept"), FAULTS.values(), ids=FAULTS)
def test_a_fault_is_named_with_its_severity_and_consequence(
    rng, tmp_path, edit, severity, words, kept
):
    import re

    path = damaged(rng, tmp_path, edit)
    file = load(path)
    found = [p for p in file.problems + check(file) if re.search(words, p.what)]
    assert [p.severity for p in found] == [severity], file.problems + check(file)
    assert found[0].file == str(path)
    assert found[0].done
    if kept is not None:
        observation = read(path)
        assert (len(observation.v2), len(observation.t3)) == kept


def test_a_sound_file_has_no_fault(rng, tmp_path):
    """Without this, a check that always complains would pass the tests of faults."""
    path = damaged(rng, tmp_path, lambda opened: None)
    file = load(path)
    problems = [p.what for p in file.problems + check(file)]
    assert problems == ["column T3AMP holds no number"]


def test_nulls_of_ids_belong_to_nothing(rng, tmp_path):
    """NULL in OI_TARGET and in a row of data are not the same star; nor are stations and data."""

    def edit(opened):
        for name in ("OI_TARGET", "OI_VIS2"):
            number = opened[name].columns.names.index("TARGET_ID") + 1
            opened[name].header[f"TNULL{number}"] = 2
        for name in ("OI_ARRAY", "OI_VIS2"):
            number = opened[name].columns.names.index("STA_INDEX") + 1
            opened[name].header[f"TNULL{number}"] = 4
        number = opened["OI_VIS2"].columns.names.index("CORRINDX_VIS2DATA") + 1
        opened["OI_VIS2"].header[f"TNULL{number}"] = 1

    path = damaged(rng, tmp_path, edit, make_file=make.full)
    file = load(path)
    assert file.target.target.tolist() == ["Harrow 7"]
    said = [str(p) for p in file.problems + check(file)]
    for words in (
        "OI_TARGET (HDU 1): column TARGET_ID is NULL in 1 rows; these rows are left out",
        "OI_ARRAY (HDU 2): column STA_INDEX is NULL in 1 rows; these rows are left out",
        "OI_VIS2 (HDU 8): column STA_INDEX: 3 values are NULL; taken as unknown ids",
        "OI_VIS2 (HDU 8): column CORRINDX_VIS2DATA: 1 values are NULL; taken as unknown ids",
    ):
        assert words in said
    observation = read(path)
    assert observation.stations == ("S1", "S2", "S3")
    np.testing.assert_array_equal((observation.v2.stations < 0).any(axis=1).sum(), 3 * 3 - 1)
    # The three data of the first row were numbers 1 to 3, which correlated with each other.
    np.testing.assert_array_equal(observation.correlation.toarray()[:3], np.eye(28)[:3])


def test_two_stars_of_one_name_in_a_file_are_told_apart(rng, tmp_path):
    file = make.small(rng)
    file.target = Target(
        target_id=[1, 2, 3], target=["STAR", "star", "Star"], raep0=[84.1, 200.0, 84.11],
        decep0=[-1.2, 50.0, -1.2],
    )  # fmt: skip
    file.data[1].target_id[:] = [2, 2, 3, 3]
    file.write(tmp_path / "night.fits")
    again = load(tmp_path / "night.fits")
    assert again.target.target.tolist() == ["STAR", "star_2", "Star"]
    # By the spherical law of cosines, 107.26 deg.
    assert [str(p) for p in again.problems if p.severity == SUSPICIOUS] == [
        "OI_TARGET (HDU 1): two targets 'star' are 107 deg apart; the second is called 'star_2'"
    ]
    with pytest.raises(InputError, match="several targets; choose one of 'STAR', 'star_2'"):
        read(tmp_path / "night.fits")
    one, two = (read(tmp_path / "night.fits", target=name) for name in ("star", "star_2"))
    assert (len(one.v2), len(one.t3), len(two.v2), len(two.t3)) == (18, 6, 0, 6)


def test_strict_refuses_what_is_suspicious_but_not_a_note(rng, tmp_path):
    path = damaged(rng, tmp_path, lambda opened: None)
    assert len(read(path, strict=True).v2) == 18
    path = tmp_path / "odd"
    path.mkdir()
    odd = damaged(rng, path, values("OI_VIS2", "VIS2DATA", 1.9))
    with pytest.raises(InputError, match=r"OI_VIS2 \(HDU 4\): column VIS2DATA is far outside"):
        read(odd, strict=True)


def test_damaged_data_are_told_by_the_checksum(rng, tmp_path):
    path = tmp_path / "night.fits"
    make.small(rng).write(path)
    content = bytearray(path.read_bytes())
    content[-2500] ^= 1  # before the padding
    path.write_bytes(content)
    assert [p.what for p in load(path).problems] == [
        "keyword DATASUM does not agree with the contents"
    ]


def test_stated_units_are_converted(rng, tmp_path):
    """Micron, radian and centimetre come out as metre, degree and metre."""

    def edit(opened):
        wave, phase, array = opened["OI_WAVELENGTH"], opened["OI_T3"], opened["OI_ARRAY"]
        wave.data["EFF_WAVE"] *= 1e6
        wave.columns["EFF_WAVE"].unit = "um"
        phase.data["T3PHI"] = np.radians(phase.data["T3PHI"])
        phase.columns["T3PHI"].unit = "rad"
        array.data["STAXYZ"] *= 100
        array.columns["STAXYZ"].unit = "cm"

    plain = make.small(np.random.default_rng(3))
    file = load(damaged(np.random.default_rng(3), tmp_path, edit))
    # A float32 is good to 6e-8; the others to a few rounding errors of float64.
    np.testing.assert_allclose(file.wavelengths[0].eff_wave, plain.wavelengths[0].eff_wave, 2e-7)
    np.testing.assert_allclose(file.data[1].t3phi, plain.data[1].t3phi, rtol=1e-14)
    np.testing.assert_allclose(file.arrays[0].staxyz, make.STATIONS, rtol=1e-14)


def test_percent_is_converted(rng, tmp_path):
    plain = make.small(np.random.default_rng(3))

    def edit(opened):
        table = opened["OI_VIS2"]
        table.data["VIS2DATA"] *= 100
        table.data["VIS2ERR"] *= 100
        table.columns["VIS2DATA"].unit = "%"  # which holds for the errors too

    file = load(damaged(np.random.default_rng(3), tmp_path, edit))
    # Two roundings, each by half of 2^-52.
    np.testing.assert_allclose(file.data[0].vis2data, plain.data[0].vis2data, rtol=3e-16)
    np.testing.assert_allclose(file.data[0].vis2err, plain.data[0].vis2err, rtol=3e-16)
    notes = [str(p) for p in file.problems if "is in %" in p.what]
    assert notes == [
        f"OI_VIS2 (HDU 4): column {name} is in %; converted to plain numbers"
        for name in ("VIS2DATA", "VIS2ERR")
    ]


def test_errors_without_a_unit_share_that_of_their_data(rng, tmp_path):
    """Phases in rad beside errors taken as degrees would count 3000 times too much."""
    path = damaged(rng, tmp_path, lambda opened: None)
    plain = read(path)

    def in_radians(opened):
        column("OI_T3", "T3PHI", "3D", np.radians, unit="rad")(opened)
        column("OI_T3", "T3PHIERR", "3D", np.radians)(opened)

    (tmp_path / "other").mkdir()
    other = read(damaged(rng, tmp_path / "other", in_radians))
    # Twice a conversion there and back: two roundings each of 2^-53, of errors that are the same.
    np.testing.assert_allclose(other.t3.error, plain.t3.error, rtol=1e-15)


def test_a_bright_companion_is_no_sign_of_small_errors(rng):
    """One as bright as the primary, 30 mas away, turns phases wildly from channel to channel."""
    file = make.small(rng)
    waves = np.linspace(1.5e-6, 1.7e-6, 8)
    file.wavelengths = [Wavelength(insname="SIM_H", eff_wave=waves, eff_band=np.full(8, 2.5e-8))]
    turns = file.data[1].legs @ np.array([20, 22.0]) * np.radians(1 / 3.6e6)
    a, b = (np.exp(-2j * np.pi * turns[:, k, None] / waves) for k in (0, 1))
    dimmed = 0.9
    phase = np.degrees(np.angle((1 + dimmed * a) * (1 + dimmed * b) * np.conj(1 + dimmed * a * b)))
    table = make.t3(rng, nwave=8)
    table.t3phi[:], table.t3phierr[:] = phase, 0.2
    file.data = [table]
    assert np.median(np.abs(np.diff(phase, axis=1))) > 10  # the test of the test
    assert not any("smaller than the scatter" in p.what for p in check(file))


def test_data_given_twice_are_noticed_in_one_file_and_in_two(rng, tmp_path):
    file = make.small(rng)
    file.write(tmp_path / "night.fits")
    file.data = [*file.data, file.data[0]]
    (found,) = [p for p in check(file) if "the same as in" in p.what]
    assert (found.severity, found.table) == (SUSPICIOUS, "OI_VIS2")
    assert "6 rows" in found.what
    file.data = [file.data[0], make.vis2(rng)]  # the same baselines and times, other numbers
    file.write(tmp_path / "more.fits")
    assert not any("the same as in" in p.what for p in check(file))
    paths = [tmp_path / "night.fits", tmp_path / "more.fits"]
    (found,) = [p for p in read(paths).problems if "the same as in" in p.what]
    assert found.what == f"6 rows of {paths[1]} are the same as in {paths[0]}"
    assert len(read([paths[0], paths[0]]).v2) == 18  # a file named twice is one file
    with pytest.raises(InputError, match=r"refused as strictly asked.*the same as in"):
        read(paths, strict=True)


def test_spectra_as_drafts_of_version_2_had_them_are_read(rng, tmp_path):
    """FLUX for FLUXDATA, and no CALSTAT: so does more than one pipeline."""
    path = tmp_path / "spectra.fits"
    file = make.full(rng)
    file.data = [*file.data[1:2], make.flux(rng, raw=True)]
    file.write(path)
    with fits.open(path) as opened:
        opened["OI_FLUX"].columns.change_name("FLUXDATA", "FLUX")
        del opened["OI_FLUX"].header["CALSTAT"]
        opened.writeto(tmp_path / "draft.fits")
    draft = load(tmp_path / "draft.fits")
    (spectra,) = draft.of(Flux)
    np.testing.assert_array_equal(spectra.fluxdata, file.data[1].fluxdata)
    assert spectra.calstat == "U"
    assert {"column FLUX is not in the standard", "keyword CALSTAT is missing"} <= {
        problem.what for problem in draft.problems
    }


@pytest.mark.parametrize("scale", [1e6, 1e9], ids=["micron", "nanometre"])
def test_wavelengths_in_an_unstated_unit_are_never_guessed(rng, tmp_path, scale):
    path = damaged(rng, tmp_path, every("OI_WAVELENGTH", "EFF_WAVE", lambda w: w * scale))
    with pytest.raises(InputError, match="no optical wavelength in m: state its unit in TUNIT"):
        load(path)


def test_baselines_in_wavelengths_are_refused(rng, tmp_path):
    def edit(opened):
        for name in ("UCOORD", "VCOORD"):
            opened["OI_VIS2"].data[name] /= 1.6e-6
        for name in ("U1COORD", "V1COORD", "U2COORD", "V2COORD"):
            opened["OI_T3"].data[name] /= 1.6e-6

    with pytest.raises(InputError, match="perhaps in wavelengths: convert them to m"):
        load(damaged(rng, tmp_path, edit))


@pytest.mark.parametrize("start", np.arange(0, 4, 0.25))
def test_triangles_are_compared_with_pairs_of_about_the_same_time(rng, start):
    """Half a second apart, wherever that falls (here in steps of 0.25 s); not a minute apart."""
    for apart, found in ((0.5, True), (60.0, False)):
        file = make.small(rng)
        pairs, triangles = file.data
        pairs.mjd[:] += start / 86400
        triangles.mjd[:] += (start + apart) / 86400
        triangles.u2coord[:] *= -1
        triangles.v2coord[:] *= -1
        said = [p for p in check(file) if "are not those of the same stations" in p.what]
        assert [p.what.split(" (first")[0] for p in said] == ["(u, v) of 4 rows"] * found


def test_missing_times_of_version_1_come_from_date_and_time(rng, tmp_path):
    def edit(opened):
        del opened[0].header["CONTENT"]
        for hdu in opened[1:]:
            hdu.header["OI_REVN"] = 1
        opened["OI_VIS2"].data["MJD"] = 0.0
        opened["OI_VIS2"].data["TIME"] = 43200.0

    file = load(damaged(rng, tmp_path, edit))
    np.testing.assert_array_equal(file.data[0].mjd, make.MJD + 0.5)  # 2026-03-14, noon
    assert any("DATE-OBS + TIME is used" in p.done for p in file.problems)


def test_phases_that_fill_the_circle_in_radians_are_noticed(rng):
    file = make.small(rng)
    file.data[1] = make.t3(rng, nwave=40)
    file.data[0] = make.vis2(rng, nwave=40)
    file.wavelengths[0] = make.spectrum(nwave=40)
    file.data[1].t3phi[:] = rng.uniform(-np.pi, np.pi, (4, 40))
    assert any("looks like radians" in p.what for p in check(file))
    file.data[1].t3phi[:] = rng.uniform(-180, 180, (4, 40))
    assert not any("radians" in p.what for p in check(file))
    file.data[1].t3phi[:] = rng.normal(0, 1, (4, 40))  # small phases in degrees
    assert not any("radians" in p.what for p in check(file))


def test_errors_far_below_the_scatter_of_repetitions_are_noticed(rng):
    """Two runs of a night a minute apart, scattered 100 times more than their errors say."""
    file = make.small(rng)
    nights = [make.vis2(rng, nwave=20, night=t) for t in (0.0, 0.0007)]
    file.wavelengths[0] = make.spectrum(nwave=20)
    for table in nights:
        table.vis2data[:] = 0.8 + rng.normal(0, 0.02, (6, 20))
        table.vis2err[:] = 0.0002
    joined = {
        c.name.lower(): np.concatenate([t[c.name] for t in nights]) for c in nights[0].present
    }
    file.data = [type(nights[0])(insname="SIM_H", arrname="SIM", date_obs="", **joined)]
    problem = next(p for p in check(file) if "smaller than the scatter" in p.what)
    ratio = float(problem.what.split(" is ")[1].split()[0])
    # Median of 120 ratios around 100: its standard error is 1.17 * 100 / sqrt(120) = 11.
    assert abs(ratio - 100) < 45


def test_triple_amplitudes_in_other_units_are_dropped_and_the_phases_kept(rng, tmp_path):
    def edit(opened):
        opened["OI_T3"].data["T3AMP"] = 3000.0
        opened["OI_T3"].data["T3AMPERR"] = 100.0

    path = damaged(rng, tmp_path, edit)
    observation = read(path, observables=("v2", "t3", "t3amp"))
    assert (len(observation.t3), len(observation.t3amp)) == (12, 0)
    assert any("T3AMP is not normalised" in p.what for p in observation.problems)


def test_an_array_without_stations_is_no_obstacle(rng):
    file = make.small(rng)
    file.arrays[0] = file.arrays[0].select(np.zeros(4, dtype=bool))
    assert [p.what for p in check(file) if "STA_INDEX" in p.what] == [
        "column STA_INDEX: 12 entries, such as 1, are not in OI_ARRAY"
    ] * 2


def test_a_quantity_without_its_error_is_not_measured(rng, tmp_path):
    def edit(opened):
        opened["OI_VIS"].columns.change_name("RVISERR", "SOMETHING")

    path = damaged(rng, tmp_path, edit, make_file=make.full)
    file = load(path)
    assert ("RVIS", "RVISERR", "CORRINDX_RVIS") not in file.data[0].measured
    assert any("unknown columns SOMETHING" in p.what for p in check(file))


def test_undefined_flags_count_as_set(rng, tmp_path):
    """Zero bytes in a logical column are FITS for "undefined"."""
    path = tmp_path / "night.fits"
    file = make.small(rng)
    file.write(path)
    content = path.read_bytes()
    place = content.index(b"F" * 3, content.index(b"OI_VIS2") + 2880)
    path.write_bytes(content[:place] + b"\0F\0" + content[place + 3 :])
    read_back = load(path)
    np.testing.assert_array_equal(read_back.data[0].flag[0], [True, False, True])
    said = [p for p in read_back.problems if "FLAG: 2 values are undefined" in p.what]
    assert [p.severity for p in said] == [UNUSABLE]


REFUSED = {
    "no such file": (lambda path: path.unlink(), "no such file"),
    "empty": (lambda path: path.write_bytes(b""), "not a FITS file"),
    "text": (lambda path: path.write_text("SIMPLE soup"), "not a FITS file"),
    "cut short": (
        lambda path: path.write_bytes(path.read_bytes()[:-2500]), "cut short in HDU 5",
    ),
    "an image": (
        lambda path: fits.PrimaryHDU(np.ones((3, 3))).writeto(path, overwrite=True),
        "FITS, but not OIFITS",
    ),
}  # fmt: skip


@pytest.mark.parametrize(("edit", "words"), REFUSED.values(), ids=REFUSED)
def test_what_is_no_oifits_is_refused_in_one_sentence(rng, tmp_path, edit, words):
    path = tmp_path / "night.fits"
    make.small(rng).write(path)
    edit(path)
    with pytest.raises(InputError, match=words) as caught:
        load(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("gone", "words"),
    [
        ("OI_TARGET", "no usable OI_TARGET table"),
        ("OI_WAVELENGTH", "no usable OI_WAVELENGTH table"),
    ],
)
def test_a_table_that_is_needed_is_missed_by_name(rng, tmp_path, gone, words):
    path = damaged(rng, tmp_path, lambda opened: opened.pop(gone))
    with pytest.raises(InputError, match=words):
        load(path)


def test_a_file_with_everything_flagged_has_nothing_to_offer(rng, tmp_path):
    file = make.small(rng)
    for table in file.data:
        table.flag[:] = True
    file.write(tmp_path / "night.fits")
    with pytest.raises(InputError, match="no usable squared visibilities or closure phases of Ha"):
        read(tmp_path / "night.fits")
