"""What holds for any file, however its numbers, flags, names and ids happen to be."""

from collections import Counter

import numpy as np
import oifits_files as make
from astropy.time import Time
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from orbits.oifits import (
    T3,
    Corr,
    OIFile,
    Selection,
    Vis,
    Vis2,
    Wavelength,
    load,
    observations,
    select,
)
from orbits.oifits.converting import convert
from orbits.oifits.flipping import flipped
from orbits.oifits.joining import join

ODD = (np.nan, np.inf, -np.inf, 0.0, -1.0, 1e300, -1e-300, 3.0)


def odd_file(seed: int) -> OIFile:
    """A complete file in which anything may be odd that a file in circulation has odd."""
    rng = np.random.default_rng(seed)
    file = make.full(rng)
    for table in file.data:
        for value, error, _ in table.quantities:
            for name in (value, error):
                if table[name] is not None and rng.random() < 0.7:
                    place = tuple(rng.integers(table[name].shape))
                    table[name][place] = ODD[rng.integers(len(ODD))]
        table.flag |= rng.random(table.flag.shape) < rng.choice([0.0, 0.2])
    if rng.random() < 0.5:
        spectrum = file.wavelengths[0]
        file.wavelengths[0] = Wavelength(
            insname=spectrum.insname, eff_wave=spectrum.eff_wave[::-1], eff_band=spectrum.eff_band
        )
    if rng.random() < 0.5:
        number = int(rng.integers(-5, 200))
        for table in (file.target, *file.data, *file.polarisations):
            table.target_id = np.where(table.target_id == 1, number + 2000, table.target_id)
    if rng.random() < 0.5:
        shift = int(rng.integers(-3, 50))
        for table in (file.arrays[0], *file.data, *file.polarisations):
            if table.sta_index is not None:
                table.sta_index = table.sta_index + shift
    if rng.random() < 0.5:
        file.arrays = file.arrays[1:]
        for table in file.data:
            table.arrname = None
    if rng.random() < 0.5:
        pairs = rng.integers(-2, 50, (30, 2))
        file.correlations[0] = Corr(
            corrname="NIGHT", ndata=42, iindx=pairs[:, 0], jindx=pairs[:, 1],
            corr=rng.uniform(-1.2, 1.2, 30),
        )  # fmt: skip
    return file


SEEDS = st.integers(0, 2**32 - 1)
MANY = settings(
    max_examples=40,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)


@MANY
@given(seed=SEEDS)
def test_a_converted_file_is_valid_and_reads_back_as_it_was_written(tmp_path, seed):
    file = odd_file(seed)
    copy, breaches = convert(file, tmp_path / "copy.fits", force=True)
    assert [str(breach) for breach in breaches] == []
    make.assert_same(copy, load(tmp_path / "copy.fits"))


def usable_by_hand(table, value: str, error: str) -> Counter:
    """The data that count, one by one: unflagged numbers with positive finite errors.

    Numbers beyond 1e9, and errors a thousand times smaller than is typical of the table, do not.
    """
    found: Counter = Counter()
    typical = [e for e, bad in zip(table[error].flat, table.flag.flat, strict=True)
               if not bad and 0 < e < np.inf]  # fmt: skip
    least = np.median(typical) / 1000 if typical else 0
    for row in range(len(table)):
        for channel in range(table.flag.shape[1]):
            datum, sigma = table[value][row, channel], table[error][row, channel]
            if not table.flag[row, channel] and abs(datum) < 1e9 and least < sigma < np.inf:
                found[datum, sigma] += 1
    return found


@MANY
@given(seed=SEEDS)
def test_exactly_the_usable_data_are_observed(seed):
    file = odd_file(seed)
    wanted = {"v2": Counter(), "t3": Counter()}
    for table in file.data:
        if isinstance(table, Vis2):
            wanted["v2"] += usable_by_hand(table, "VIS2DATA", "VIS2ERR")
        if isinstance(table, T3):
            wanted["t3"] += usable_by_hand(table, "T3PHI", "T3PHIERR")
    nights = [night for name in ("Harrow 7", "Calibrator of it")
              for night in observations(file, target=name)]  # fmt: skip
    seen = Counter()
    for night in nights:
        seen.update(zip(night.v2.value.tolist(), night.v2.error.tolist(), strict=True))
    assert seen == wanted["v2"]
    phases = np.concatenate([night.t3.value for night in nights])
    expected = np.radians([datum for datum, _ in wanted["t3"].elements()])
    for part in (np.cos, np.sin):
        # 1e-7 of a radian is what 1e9 deg leave of a phase.
        np.testing.assert_allclose(np.sort(part(phases)), np.sort(part(expected)), atol=1e-7)


@MANY
@given(seed=SEEDS)
def test_reversing_phases_twice_changes_nothing(seed):
    file = odd_file(seed)
    make.assert_same(flipped(flipped(file)), file)
    once = flipped(file)
    for before, after in zip(file.data, once.data, strict=True):
        if isinstance(before, Vis):
            np.testing.assert_array_equal(after.ivis, -before.ivis)
            np.testing.assert_array_equal(after.rvis, before.rvis)


@MANY
@given(seed=SEEDS)
def test_parts_of_a_file_joined_are_the_file(seed):
    """Cut between the nights and put together, every datum has the same neighbours and errors."""
    file = odd_file(seed)
    cut = Time(make.MJD + 0.5, format="mjd")
    early = Selection(dates=(Time(50000, format="mjd"), cut))
    late = Selection(dates=(cut, Time(70000, format="mjd")))
    whole = join([select(file, early), select(file, late)])
    for target in ("Harrow 7", "Calibrator of it"):
        for one, two in zip(
            observations(file, target=target), observations(whole, target=target), strict=True
        ):
            for name in ("v2", "t3"):
                a, b = getattr(one, name), getattr(two, name)
                for field in ("legs", "wavelength", "value", "error", "mjd", "channel"):
                    np.testing.assert_array_equal(getattr(a, field), getattr(b, field))
            if one.correlation is None:
                assert two.correlation is None
            else:
                np.testing.assert_array_equal(one.correlation.toarray(), two.correlation.toarray())
