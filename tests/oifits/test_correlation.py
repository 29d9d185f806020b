"""Correlations of OI_CORR end up between the data they belong to."""

import numpy as np
import oifits_files as make
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse import csr_array, diags_array

from orbits import read
from orbits.oifits import Corr, OIFile, Selection, Wavelength, correlation, observations, select
from orbits.oifits.conforming import conform
from orbits.oifits.correlation import Numbers, mended
from orbits.oifits.flipping import flipped


def example(rng) -> OIFile:
    """Two channels; two rows of V2 (numbers 1, 3) and one closure phase (T3AMP 5, T3PHI 7).

    Errors and correlations are those of a worked example: neighbouring channels of V2 0.8, one
    pair across baselines 0.3, the two channels of the closure phase 0.5.
    """
    pairs = make.vis2(rng, nwave=2).select(np.arange(6) < 2)
    pairs.corrname, pairs.corrindx_vis2data = "C", np.array([1, 3])
    pairs.vis2err[:] = [[0.02, 0.02], [0.03, 0.03]]
    triangle = make.t3(rng, nwave=2).select(np.arange(4) < 1)
    triangle.corrname = "C"
    triangle.corrindx_t3amp, triangle.corrindx_t3phi = np.array([5]), np.array([7])
    triangle.t3phierr[:] = [[1.5, 2.0]]
    matrix = Corr(
        corrname="C", ndata=8, iindx=[1, 3, 1, 7], jindx=[2, 4, 3, 8], corr=[0.8, 0.8, 0.3, 0.5]
    )
    return OIFile(
        target=make.small(rng).target,
        arrays=[make.array()],
        wavelengths=[make.spectrum(nwave=2)],
        data=[pairs, triangle],
        correlations=[matrix],
    )


def covariance(observation) -> np.ndarray:
    """(n, n) of V2 and closure phases (deg), from errors and correlation matrix."""
    error = np.concatenate([observation.v2.error, np.degrees(observation.t3.error)])
    return observation.correlation.toarray() * error[:, None] * error


def test_the_covariance_of_the_worked_example(rng):
    """C_ij = R_ij s_i s_j by hand: 0.8 x 0.02 x 0.02 = 3.2e-4, and so on."""
    (observation,) = observations(example(rng))
    expected = np.array(
        [
            [4.0e-4, 3.2e-4, 1.8e-4, 0, 0, 0],
            [3.2e-4, 4.0e-4, 0, 0, 0, 0],
            [1.8e-4, 0, 9.0e-4, 7.2e-4, 0, 0],
            [0, 0, 7.2e-4, 9.0e-4, 0, 0],
            [0, 0, 0, 0, 2.25, 1.5],
            [0, 0, 0, 0, 1.5, 4.0],
        ]
    )
    np.testing.assert_allclose(covariance(observation), expected, rtol=1e-14)


def test_flagged_data_take_their_rows_and_columns_with_them(rng):
    file = example(rng)
    whole = covariance(observations(file)[0])
    file.data[0].flag[0, 1] = True  # number 2
    file.data[1].flag[0, 0] = True  # numbers 5 and 7
    (observation,) = observations(file)
    assert (len(observation.v2), len(observation.t3)) == (3, 1)
    kept = [0, 2, 3, 5]
    np.testing.assert_allclose(covariance(observation), whole[np.ix_(kept, kept)], rtol=1e-14)


def test_data_without_correlations_are_independent(rng):
    assert observations(make.small(rng))[0].correlation is None


def test_selecting_from_an_observation_keeps_what_belongs_together(rng):
    (observation,) = observations(example(rng))
    part = observation.select(v2=np.array([False, True, True, True]), t3=np.array([False, True]))
    kept = [1, 2, 3, 5]
    expected = observation.correlation.toarray()[np.ix_(kept, kept)]
    np.testing.assert_array_equal(part.correlation.toarray(), expected)
    np.testing.assert_array_equal(part.v2.value, observation.v2.value[1:])


def test_reversing_phases_reverses_their_correlations_with_amplitudes(rng):
    """cov(-x, y) = -cov(x, y), and cov(-x, -y) = cov(x, y)."""
    file = example(rng)
    file.correlations = [
        Corr(corrname="C", ndata=8, iindx=[1, 7], jindx=[7, 8], corr=[0.25, 0.5]),
    ]
    before, after = observations(file)[0], observations(flipped(file))[0]
    signs = np.diag([1, 1, 1, 1, -1, -1])
    expected = signs @ before.correlation.toarray() @ signs
    np.testing.assert_array_equal(after.correlation.toarray(), expected)
    np.testing.assert_array_equal(after.t3.value, -before.t3.value)


def matrix_by_hand(file: OIFile) -> dict[tuple, float]:
    """Correlations between data named by table, row's baseline, wavelength and quantity."""
    found = {}
    for corr in file.correlations:
        names = {}
        for table in file.data:
            if table.corrname != corr.corrname:
                continue
            waves = file.wavelength(table.insname).eff_wave
            for value, _, index in table.quantities:
                if table[value] is None or table[index] is None:
                    continue
                for row, first in enumerate(table[index].tolist()):
                    for channel, wave in enumerate(waves.tolist()):
                        place = (value, *table.sta_index[row].tolist(), table.mjd[row], wave)
                        names[first + channel] = place
        for i, j, r in zip(corr.iindx.tolist(), corr.jindx.tolist(), corr.corr, strict=True):
            if i in names and j in names:
                found[tuple(sorted([names[i], names[j]]))] = float(r)
    return found


def test_selection_renumbers_without_confusing_anything(rng):
    """Every correlation between two data that stay is still between these two, and no other is."""
    file = make.full(rng)
    waves = file.wavelengths[0].eff_wave
    part = select(
        file,
        Selection(stations=("S1", "S2", "S3"), wavelengths=np.array([1.54, 1.7]) * _um()),
        target="Harrow 7",
    )
    np.testing.assert_array_equal(part.wavelengths[0].eff_wave, waves[1:])
    before, after = matrix_by_hand(file), matrix_by_hand(part)
    assert 0 < len(after) < len(before)
    assert after.items() <= before.items()
    stay = {p for pair in after for p in pair}
    assert {pair for pair in before if set(pair) <= stay} == set(after)
    assert part.correlations[0].ndata == 3 * 2 + 1 * 2 * 2  # V2; T3AMP and T3PHI


def test_sorting_channels_carries_their_correlations_along(rng):
    file = make.full(rng)
    before = matrix_by_hand(file)
    backwards = file.wavelengths[0].eff_wave[::-1].copy()
    file.wavelengths[0] = Wavelength(insname="SIM_H", eff_wave=backwards)
    turned = matrix_by_hand(file)
    sorted_file = conform(file)
    assert np.all(np.diff(sorted_file.wavelengths[0].eff_wave) > 0)
    assert matrix_by_hand(sorted_file) == turned != before


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_the_matrix_is_that_of_the_definition(seed):
    """Against a dense matrix filled entry by entry, with gaps, repetitions and either order."""
    rng = np.random.default_rng(seed)
    size = 12
    i, j = rng.integers(-1, size + 3, (2, 20))
    r = rng.uniform(-0.9, 0.9, 20)
    file = example(rng)
    file.correlations = [Corr(corrname="C", ndata=size, iindx=i, jindx=j, corr=r)]
    numbers = rng.permutation(size)[:8]
    numbers[rng.random(8) < 0.2] = -1
    dense = np.eye(8)
    done = set()
    for a, b, value in zip(i, j, r, strict=True):
        pair = (min(a, b), max(a, b))
        if a == b or pair in done or pair[0] < 1 or pair[1] > size:
            continue
        done.add(pair)
        if a - 1 in numbers and b - 1 in numbers:
            x, y = numbers.tolist().index(a - 1), numbers.tolist().index(b - 1)
            dense[x, y] = dense[y, x] = value
    matrix = Numbers(file).matrix(numbers)
    np.testing.assert_array_equal(np.eye(8) if matrix is None else matrix.toarray(), dense)


@pytest.mark.parametrize("r", [0.4, -0.4])
def test_a_matrix_that_is_not_mended_is_mended_and_said(rng, tmp_path, r):
    """Three data with correlations r, r, -r: the smallest eigenvalue is 1 - 2 |r|, for |r| > 1/2
    negative. Mended, it is 0.01 by design, and the other group is left as it was."""
    file = example(rng)
    file.correlations = [
        Corr(
            corrname="C",
            ndata=8,
            iindx=[1, 2, 1, 7],
            jindx=[2, 3, 3, 8],
            corr=[2 * r, 2 * r, -0.8, 0.5],
        )
    ]
    file.write(tmp_path / "night.fits")
    observation = read(tmp_path / "night.fits")
    matrix = observation.correlation.toarray()
    # Eigenvalues of 3 x 3 matrices are good to a few 1e-16.
    assert np.linalg.eigvalsh(matrix)[0] == pytest.approx(0.01, abs=1e-14)
    assert matrix[4, 5] == 0.5
    assert [p.what for p in observation.problems if "no real data" in p.what] == [
        "the correlations of 1 groups of data are those of no real data (smallest eigenvalue -0.6)"
    ]


@pytest.mark.parametrize("large", [10, 1000])
def test_chains_of_correlated_data_are_mended_whatever_their_length(monkeypatch, large):
    """Neighbours with correlation r: eigenvalues 1 + 2 r cos(k pi / (n + 1)), here down to -0.2.

    Small groups are solved densely, large ones by iteration to a part in a thousand, which leaves
    the mended eigenvalue within 0.002 of the 0.01 it is meant to be.
    """
    monkeypatch.setattr(correlation, "LARGE", large)
    size = 200
    beside = np.full(size - 1, 0.6)
    chain = csr_array(diags_array([beside, np.ones(size), beside], offsets=[-1, 0, 1]))
    better, repair = mended(chain)
    exact = 1 - 1.2 * np.cos(np.pi / (size + 1))
    assert repair.smallest == pytest.approx(exact, abs=0.002)
    assert np.linalg.eigvalsh(better.toarray())[0] == pytest.approx(0.01, abs=0.002)
    beside[:] = 0.4
    sound = csr_array(diags_array([beside, np.ones(size), beside], offsets=[-1, 0, 1]))
    same, repair = mended(sound)
    assert repair is None
    np.testing.assert_array_equal(same.toarray(), sound.toarray())


@pytest.mark.parametrize(("r", "sound"), [(0.3, True), (-0.012, True), (-0.1, False)])
def test_large_full_groups_are_iterated_on_only_if_they_must_be_mended(monkeypatch, r, sound):
    """All pairs of n data with the correlation r: the eigenvalues are 1 - r and 1 + (n - 1) r."""
    import scipy.sparse.linalg

    iterate, called = scipy.sparse.linalg.eigsh, []

    def eigsh(*arguments, **options):
        called.append(True)
        return iterate(*arguments, **options)

    monkeypatch.setattr(scipy.sparse.linalg, "eigsh", eigsh)
    monkeypatch.setattr(correlation, "LARGE", 70)
    size = 80
    better, repair = mended(csr_array(np.full((size, size), r) + (1 - r) * np.eye(size)))
    assert (repair is None, not called) == (sound, sound)
    lowest = np.linalg.eigvalsh(better.toarray())[0]
    # The iteration stops at a part in a thousand of the eigenvalue with 1 added, here 5.9, and
    # the mending shrinks that error with the matrix, by (1 - 0.01) / (1 + 6.9).
    assert lowest == pytest.approx(1 - r if r > 0 else 1 + (size - 1) * r if sound else 0.01,
                                   abs=1e-3)  # fmt: skip


def test_redundant_closure_phases_are_left_as_they_are():
    """Four closure phases of four stations correlate by 1/3 or -1/3 and have rank three."""
    third = 1 / 3
    matrix = np.array(
        [
            [1, third, -third, third],
            [third, 1, third, -third],
            [-third, third, 1, third],
            [third, -third, third, 1],
        ]
    )
    assert np.linalg.eigvalsh(matrix)[0] == pytest.approx(0, abs=1e-15)
    same, repair = mended(csr_array(matrix))
    assert repair is None
    np.testing.assert_array_equal(same.toarray(), matrix)


def test_an_absurd_number_of_data_asks_for_no_memory(rng):
    file = example(rng)
    expected = observations(file)[0].correlation.toarray()
    file.correlations[0].ndata = 10**18
    (observation,) = observations(flipped(flipped(file)))
    np.testing.assert_array_equal(observation.correlation.toarray(), expected)
    part = select(file, Selection(stations=("S1", "S2", "S3")))
    assert part.correlations[0].ndata == 4 + 2 + 2


def test_faults_of_the_correlations_are_named(rng):
    from orbits.oifits.checking import check

    file = example(rng)
    file.correlations = [
        Corr(corrname="C", ndata=8, iindx=[1, 1, 2, 9, 5], jindx=[2, 3, 1, 1, 6],
             corr=[0.1, 1.5, 0.1, 0.2, 0.0]),
    ]  # fmt: skip
    file.data[1].corrindx_t3amp = None
    file.data[0].corrindx_vis2data = np.array([1, 2])
    said = " | ".join(p.what for p in check(file))
    for words in (
        "1 rows name data outside 1 to 8",
        "CORR is 1.5 in row 2",
        "1 pairs are listed twice",
        "some data have the same number",
        "column CORRINDX_T3AMP is missing",
    ):
        assert words in said


def _um():
    import astropy.units as u

    return u.um
