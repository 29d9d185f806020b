"""The checklist for valid files finds each breach, and conversion heals what can be healed."""

import numpy as np
import oifits_files as make
import pytest
from astropy.io import fits

from orbits import InputError, read
from orbits.oifits import load
from orbits.oifits.converting import convert
from orbits.oifits.validation import validate


def edited(rng, tmp_path, edit):
    """The path of a full file after `edit`, a function of the file opened with astropy."""
    make.full(rng).write(tmp_path / "sound.fits")
    path = tmp_path / "night.fits"
    with fits.open(tmp_path / "sound.fits") as opened:
        edit(opened)
        for hdu in opened:
            hdu.header.pop("CHECKSUM", None)
            hdu.header.pop("DATASUM", None)
        opened.writeto(path)
    return path


def key(name, keyword, value, version=1):
    """An edit of a keyword of a table, the first of its name unless told otherwise."""

    def edit(opened):
        if value is None:
            del opened[name, version].header[keyword]
        else:
            opened[name, version].header[keyword] = value

    return edit


def cell(name, column, value, where=(0, 0), version=1):
    """An edit of values of a column."""

    def edit(opened):
        opened[name, version].data[column][where] = value

    return edit


def retyped(name, column, form):
    """An edit that writes a column in another form."""

    def edit(opened):
        hdu = opened[name]
        values = {c.name: hdu.data[c.name] for c in hdu.columns}
        forms = {c.name: form if c.name == column else c.format for c in hdu.columns}
        units = {c.name: c.unit for c in hdu.columns}
        dims = {c.name: c.dim for c in hdu.columns}
        table = fits.BinTableHDU.from_columns(
            [
                fits.Column(n, forms[n], unit=units[n], dim=dims[n], array=values[n])
                for n in values
                if forms[n]
            ],
            header=fits.Header([c for c in hdu.header.cards if not c.keyword.startswith("T")]),
            name=name,
        )
        opened[name] = table

    return edit


BREACHES = {
    "content": (lambda o: o[0].header.pop("CONTENT"), "error: primary keyword CONTENT"),
    "observer": (lambda o: o[0].header.pop("OBSERVER"), "error: primary keyword OBSERVER is"),
    "two targets tables": (
        lambda o: o.append(o["OI_TARGET"].copy()), "error: 2 OI_TARGET tables, not 1",
    ),
    "revision": (key("OI_T3", "OI_REVN", 1), r"error: OI_T3 (HDU 10): OI_REVN is 1, not 2"),
    "revision of a new table": (key("OI_FLUX", "OI_REVN", 2), "OI_REVN is 2, not 1"),
    "keyword gone": (key("OI_VIS2", "ARRNAME", None), "keyword ARRNAME is missing"),
    "column gone": (retyped("OI_VIS2", "INT_TIME", None), "column INT_TIME is missing"),
    "single precision": (
        retyped("OI_VIS2", "VIS2DATA", "3E"), "warning: OI_VIS2 (HDU 8): column VIS2DATA is E",
    ),
    "wrong type": (retyped("OI_TARGET", "SYSVEL", "J"), "column SYSVEL is J, not D"),
    "short names": (
        retyped("OI_TARGET", "TARGET", "16A"),
        "warning: OI_TARGET (HDU 1): column TARGET has 16 letters, not 32",
    ),
    "frame": (key("OI_ARRAY", "FRAME", "LOCAL"), "FRAME is 'LOCAL'"),
    "amptyp": (key("OI_VIS", "AMPTYP", "relative"), "AMPTYP is 'relative'"),
    "calstat": (key("OI_FLUX", "CALSTAT", "X"), "CALSTAT is 'X'"),
    "category": (cell("OI_TARGET", "CATEGORY", "TOY", 0), "advice: OI_TARGET (HDU 1): CATEGORY"),
    "no reference map": (
        retyped("OI_VIS", "VISREFMAP", None), "differential, but there is no VISREFMAP",
    ),
    "needless reference map": (
        key("OI_VIS", "PHITYP", "absolute"), "VISREFMAP, but nothing is differential",
    ),
    "raw spectrum without array": (
        key("OI_FLUX", "ARRNAME", None), "uncalibrated, but without ARRNAME",
    ),
    "calibrated spectrum with array": (
        key("OI_FLUX", "ARRNAME", "SIM", 2), "calibrated, but with ARRNAME",
    ),
    "unknown target": (cell("OI_VIS2", "TARGET_ID", 9, 0), "a TARGET_ID is not in OI_TARGET"),
    "unknown station": (cell("OI_VIS2", "STA_INDEX", 9), "a STA_INDEX is not in the OI_ARRAY"),
    "unknown array": (key("OI_VIS2", "ARRNAME", "GONE"), "ARRNAME 'GONE' has no OI_ARRAY"),
    "unknown instrument": (key("OI_VIS2", "INSNAME", "GONE"), "INSNAME 'GONE' has no"),
    "unknown correlations": (key("OI_VIS2", "CORRNAME", "GONE"), "CORRNAME 'GONE' has no OI_CORR"),
    "negative error": (cell("OI_VIS2", "VIS2ERR", -1.0), "VIS2ERR is negative"),
    "error 0": (cell("OI_T3", "T3PHIERR", 0.0), "advice: OI_T3 (HDU 10): column T3PHIERR is 0"),
    "error NaN": (cell("OI_VIS2", "VIS2ERR", np.nan), "warning: OI_VIS2 (HDU 8): column VIS2ERR"),
    "amplitude above 1": (
        cell("OI_T3", "T3AMP", 1.2, 0, version=2), "T3AMP is above 1 + T3AMPERR",
    ),
    "time": (cell("OI_VIS2", "TIME", 3.0, 0), "warning: OI_VIS2 (HDU 8): column TIME is not 0"),
    "mjd": (cell("OI_VIS2", "MJD", 0.0, 0), "MJD is not positive"),
    "wavelengths": (cell("OI_WAVELENGTH", "EFF_WAVE", 1.9e-6, 0), "EFF_WAVE does not ascend"),
    "microns": (
        cell("OI_WAVELENGTH", "EFF_WAVE", [1.5, 1.6, 1.7], slice(None)), "not between 1e-7",
    ),
    "bandwidth": (cell("OI_WAVELENGTH", "EFF_BAND", -1e-8, 0), "EFF_BAND is negative"),
    "id twice": (cell("OI_TARGET", "TARGET_ID", 1, 1), "TARGET_ID has a number twice"),
    "id 0": (cell("OI_ARRAY", "STA_INDEX", 0, 3), "STA_INDEX has numbers below 1"),
    "name twice": (
        cell("OI_TARGET", "TARGET", "Harrow 7", 1), "TARGET has a name twice",
    ),
    "instrument twice": (
        key("OI_WAVELENGTH", "INSNAME", "SIM_H", 2),
        "2 OI_WAVELENGTH tables have the INSNAME 'SIM_H'",
    ),
    "station twice": (
        cell("OI_VIS2", "STA_INDEX", [1, 1], 0), "a row has the same station twice",
    ),
    "channels": (
        key("OI_VIS2", "INSNAME", "SIM_K"), "column VIS2DATA has 3 values a row, not 1",
    ),
    "index": (cell("OI_CORR", "JINDX", 99, 0), "an index is outside 1 to NDATA = 42"),
    "correlation": (cell("OI_CORR", "CORR", 1.1, 0), "a CORR is outside -1 to 1"),
    "pair twice": (
        lambda o: (cell("OI_CORR", "IINDX", 1, 1)(o), cell("OI_CORR", "JINDX", 2, 1)(o)),
        "a pair is listed twice",
    ),
    "no unit": (
        lambda o: setattr(o["OI_FLUX"].columns["FLUXDATA"], "unit", None), "FLUXDATA has no unit",
    ),
}  # fmt: skip


def test_a_full_file_breaks_nothing(rng, tmp_path):
    assert validate(edited(rng, tmp_path, lambda opened: None)) == []


@pytest.mark.parametrize("name", ["alp_aur-v2.fits"])
def test_the_sample_of_the_standards_library_breaks_nothing(outside, name):
    """Written by others as an example of a valid version 2 file."""
    assert validate(outside / name) == []


@pytest.mark.parametrize(("edit", "words"), BREACHES.values(), ids=BREACHES)
def test_each_breach_is_found(rng, tmp_path, edit, words):
    found = [str(breach) for breach in validate(edited(rng, tmp_path, edit))]
    assert any(words in breach for breach in found), found


INCURABLE = {
    "amptyp",  # only the author knows what was meant
    "calstat",
    "category",
    "frame",
    "microns",
    "mjd",
    "no reference map",
    "needless reference map",
    "no unit",
    "raw spectrum without array",
    "station twice",
}
REFUSED = {"id twice", "instrument twice"}
"""What makes a file ambiguous, so that there is nothing to convert."""


@pytest.mark.parametrize("name", sorted(set(BREACHES) - INCURABLE - REFUSED))
def test_conversion_heals_what_it_can(rng, tmp_path, name):
    """Nothing remains to be said about a copy, except what only the author could put right."""
    file = load(edited(rng, tmp_path, BREACHES[name][0]))
    copy, breaches = convert(file, tmp_path / "copy.fits")
    assert [str(breach) for breach in breaches] == []
    make.assert_same(copy, load(tmp_path / "copy.fits"))


@pytest.mark.parametrize("name", sorted(REFUSED))
def test_an_ambiguous_file_is_refused(rng, tmp_path, name):
    path = edited(rng, tmp_path, BREACHES[name][0])
    with pytest.raises(InputError, match=str(path)):
        load(path)


@pytest.mark.parametrize("name", ["alp_aur-v1.fits", "contest-2008-binary.oifits"])
def test_version_1_becomes_a_valid_version_2_with_the_same_data(outside, tmp_path, name):
    _, breaches = convert(load(outside / name), tmp_path / "copy.fits")
    assert breaches == []
    before, after = read(outside / name), read(tmp_path / "copy.fits")
    for kind in ("v2", "t3"):
        for field in ("legs", "wavelength", "bandwidth", "value", "error", "mjd", "stations"):
            one, two = (getattr(getattr(o, kind), field) for o in (before, after))
            np.testing.assert_array_equal(one, two)


def test_a_file_without_array_gets_one_of_station_numbers(rng, tmp_path):
    file = make.small(rng)
    file.arrays = []
    for table in file.data:
        table.arrname = None
    copy, breaches = convert(file, tmp_path / "copy.fits")
    assert breaches == []
    assert copy.arrays[0].sta_name.tolist() == [f"STATION {k}" for k in range(1, 5)]
    assert np.isnan(copy.arrays[0].staxyz).all()
    assert any("made up of station numbers" in line for line in copy.history)


def test_what_must_not_count_is_flagged_or_nan_and_told(rng, tmp_path):
    """V2 with a negative error is flagged; an amplitude above 1 becomes NaN, its phase stays."""
    file = make.full(rng)
    file.data[1].vis2err[0, 0] = -0.1
    file.data[4].t3amp[1, 0] = 1.5
    phases = file.data[4].t3phi.copy()
    written, _ = convert(file, tmp_path / "copy.fits")
    again = load(tmp_path / "copy.fits")
    assert again.data[1].flag[0, 0]
    assert again.data[1].vis2err[0, 0] == -0.1
    assert np.isnan(again.data[4].t3amp[1, 0])
    assert not again.data[4].flag.any()
    np.testing.assert_array_equal(again.data[4].t3phi, phases)
    history = "".join(again.history)
    assert "OI_VIS2: 1 VIS2DATA without a number and a positive error flagged" in history
    assert (
        "OI_T3: 1 of 4 T3AMP above 1 + T3AMPERR, which the standard forbids, set to NaN; "
        "this biases their mean, from 0.75 to 0.5"  # (3 x 0.5 + 1.5) / 4
    ) in written.history
    assert again.history[0] == "made for a test"
