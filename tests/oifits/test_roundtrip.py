"""Reading, writing and reading again changes nothing."""

import warnings
from dataclasses import replace

import numpy as np
import oifits_files as make
import pytest
from astropy.io import fits
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from orbits import InputError
from orbits.oifits import Array, OIFile, Target, Vis2, Wavelength, blocks, load
from orbits.oifits.validation import validate

OUTSIDE = ("alp_aur-v1.fits", "alp_aur-v2.fits", "contest-2008-binary.oifits")


@pytest.mark.parametrize("name", OUTSIDE)
def test_outside_files_come_back_bit_for_bit(outside, tmp_path, name):
    first = load(outside / name)
    first.write(tmp_path / "copy.fits")
    make.assert_same(first, load(tmp_path / "copy.fits"))


@pytest.mark.parametrize("large", [1, 2**20])
def test_a_file_with_everything_comes_back_bit_for_bit(rng, tmp_path, monkeypatch, large):
    """All tables, two targets and instruments, flags, NaN, and parts the standard does not know.

    Read as large tables are, and as small ones.
    """
    monkeypatch.setattr(blocks, "LARGE", large)
    first = make.full(rng)
    first.write(tmp_path / "full.fits")
    again = load(tmp_path / "full.fits")
    make.assert_same(first, again)
    again.write(tmp_path / "again.fits")
    make.assert_same(first, load(tmp_path / "again.fits"))


def test_columns_of_varying_length_are_kept(rng, tmp_path):
    """As astropy writes and reads them, whole and after a selection of rows."""
    make.full(rng).write(tmp_path / "plain.fits")
    marks = [np.arange(n, dtype=np.float32) for n in (3, 0, 7, 1, 2, 5)]
    with fits.open(tmp_path / "plain.fits") as opened:
        number = opened.index_of("OI_VIS2")
        column = fits.Column("SCORES", format="PE()", array=np.array(marks, dtype=object))
        header = opened[number].header
        with_marks = fits.BinTableHDU.from_columns(opened[number].columns + column, header)
        opened[number] = with_marks
        opened.writeto(tmp_path / "marked.fits")
    file = load(tmp_path / "marked.fits")
    file.write(tmp_path / "whole.fits")
    table = file.of(Vis2)[0]
    file.data[file.data.index(table)] = table.select(np.array([5, 2]))
    file.write(tmp_path / "part.fits")
    for name, rows in (("whole", range(6)), ("part", (5, 2))):
        with fits.open(tmp_path / f"{name}.fits", checksum=True) as opened:
            got = opened["OI_VIS2"].data["SCORES"]
            assert [part.tolist() for part in got] == [marks[row].tolist() for row in rows]


def test_correlated_fluxes_keep_their_unit(rng, tmp_path):
    """VISAMP has a unit where AMPTYP is 'correlated flux', and only there."""
    file = make.full(rng)
    units = {**file.data[0].units, "VISAMP": "Jy", "VISAMPERR": "Jy"}
    file.data[0] = replace(file.data[0], amptyp="correlated flux", units=units)
    file.write(tmp_path / "flux.fits")
    again = load(tmp_path / "flux.fits")
    make.assert_same(file, again)
    again.write(tmp_path / "again.fits")
    with fits.open(tmp_path / "again.fits") as opened:
        assert [opened["OI_VIS"].columns[name].unit for name in ("VISAMP", "VISAMPERR")] == [
            "Jy"
        ] * 2
    file.data[0] = replace(file.data[0], amptyp="absolute")
    file.write(tmp_path / "odd.fits")
    said = [p.what for p in load(tmp_path / "odd.fits").problems]
    assert said[:1] == ["column VISAMP has the unit 'Jy'"]


def test_a_gzipped_file_reads_like_the_plain_one(rng, tmp_path):
    import gzip

    make.full(rng).write(tmp_path / "full.fits")
    (tmp_path / "full.fits.gz").write_bytes(gzip.compress((tmp_path / "full.fits").read_bytes()))
    make.assert_same(load(tmp_path / "full.fits"), load(tmp_path / "full.fits.gz"))


def test_astropy_reads_the_same_numbers_and_finds_the_file_sound(rng, tmp_path):
    """astropy.io.fits verifies headers and checksums, and sees the values that were written."""
    file = make.full(rng)
    file.write(tmp_path / "full.fits")
    with warnings.catch_warnings():
        warnings.simplefilter("error")  # a wrong checksum is only a warning to astropy
        with fits.open(tmp_path / "full.fits", checksum=True) as opened:
            opened.verify("exception")
            tables = [hdu for hdu in opened if hdu.name.startswith("OI_")]
            assert len(tables) == len(file.tables)
            for hdu, table in zip(tables, file.tables, strict=True):
                assert "CHECKSUM" in hdu.header
                for column in table.present:
                    stored = hdu.data[column.name]
                    if column.code == "A":
                        assert [text.strip() for text in stored] == table[column.name].tolist()
                    else:
                        wanted = table[column.name].reshape(stored.shape)  # NWAVE = 1 is flat
                        np.testing.assert_array_equal(stored, wanted)


def test_the_example_of_the_documentation_is_a_valid_file(tmp_path):
    file = OIFile(
        target=Target(target_id=[1], target=["Harrow 7"], raep0=[84.1], decep0=[-1.2]),
        arrays=[
            Array(
                arrname="SIM",
                tel_name=["T1", "T2"],
                sta_name=["A", "B"],
                sta_index=[1, 2],
                staxyz=[[0, 0, 0], [0, 100, 0]],
            )
        ],
        wavelengths=[Wavelength(insname="H", eff_wave=[1.6e-6, 1.7e-6], eff_band=[5e-8, 5e-8])],
        data=[
            Vis2(
                insname="H",
                arrname="SIM",
                date_obs="2026-03-14",
                target_id=[1],
                mjd=[61113.1],
                int_time=[60.0],
                vis2data=[[0.9, 0.8]],
                vis2err=[[0.01, 0.01]],
                ucoord=[80.0],
                vcoord=[60.0],
                sta_index=[[1, 2]],
            )
        ],
    )
    file.write(tmp_path / "night.oifits")
    assert validate(tmp_path / "night.oifits") == []


def test_an_existing_file_is_kept_unless_forced(rng, tmp_path):
    path = tmp_path / "night.fits"
    path.write_text("precious")
    with pytest.raises(InputError, match="exists already"):
        make.small(rng).write(path)
    assert path.read_text() == "precious"
    make.small(rng).write(path, force=True)
    assert len(load(path).data) == 2


def test_a_number_beyond_16_bits_is_refused_by_name(rng, tmp_path):
    file = make.small(rng)
    file.target.target_id[:] = 40000
    with pytest.raises(InputError, match=r"TARGET_ID has numbers beyond 32767"):
        file.write(tmp_path / "night.fits")
    assert list(tmp_path.iterdir()) == []


def test_a_column_of_the_wrong_shape_is_refused_by_name(rng):
    with pytest.raises(ValueError, match=r"VIS2ERR has shape \(6, 2\), not \(6, 3\)"):
        make.vis2(rng).__class__(
            insname="H",
            date_obs="2026-03-14",
            target_id=np.ones(6),
            mjd=np.ones(6),
            vis2data=np.ones((6, 3)),
            vis2err=np.ones((6, 2)),
            ucoord=np.ones(6),
            vcoord=np.ones(6),
            sta_index=np.ones((6, 2)),
        )


ANY_FLOAT = st.floats(width=64)
"""With NaN, infinities, zeros of both signs and subnormal numbers."""
OPTICAL = st.floats(2**-20, 2**-14, width=32)
"""Wavelengths of 1 to 60 um, m."""
PRINTABLE = st.text(st.characters(min_codepoint=33, max_codepoint=126), min_size=1, max_size=16)


@st.composite
def one_table_files(draw) -> OIFile:
    """Files with one OI_VIS2 whose numbers, flags and names are arbitrary."""
    nrow, nwave = draw(st.integers(1, 4)), draw(st.integers(1, 4))
    grid, column = (nrow, nwave), (nrow,)
    name = draw(PRINTABLE)
    return OIFile(
        target=Target(target_id=[1], target=[draw(PRINTABLE)]),
        arrays=[make.array()],
        wavelengths=[
            Wavelength(
                insname=name,
                eff_wave=draw(
                    arrays(np.float32, nwave, elements=st.floats(2**-20, 2**-14, width=32))
                ),
                eff_band=draw(arrays(np.float32, nwave, elements=st.floats(width=32))),
            )
        ],
        data=[
            Vis2(
                insname=name,
                arrname="SIM",
                date_obs="2026-03-14",
                target_id=np.ones(nrow),
                mjd=draw(arrays(float, column, elements=st.floats(5e4, 7e4))),
                int_time=draw(arrays(float, column, elements=ANY_FLOAT)),
                vis2data=draw(arrays(float, grid, elements=ANY_FLOAT)),
                vis2err=draw(arrays(float, grid, elements=ANY_FLOAT)),
                ucoord=draw(arrays(float, column, elements=st.floats(-300, 300))),
                vcoord=draw(arrays(float, column, elements=st.floats(-300, 300))),
                sta_index=draw(arrays(np.int32, (nrow, 2), elements=st.integers(-32768, 32767))),
                flag=draw(arrays(bool, grid)),
            )
        ],
    )


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(file=one_table_files())
def test_any_numbers_come_back_bit_for_bit(tmp_path_factory, file):
    path = tmp_path_factory.mktemp("any") / "night.fits"
    file.write(path)
    make.assert_same(file, load(path))
