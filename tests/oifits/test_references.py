"""Differential phases brought to a reference that all channels share, against plain averages."""

from dataclasses import replace

import astropy.units as u
import numpy as np
import oifits_files as make
import pytest

from orbits.oifits import Selection, observations, references, select
from orbits.oifits.checking import check

CHANNELS = 5
FIXED = [False, True, True, False, False]


def against(rng, phase, reference):
    """Differential phases: `phase` (6, 5) less its mean over what `reference` (5, 5) maps."""
    stored = phase - phase @ reference.T / reference.sum(axis=1)
    table = make.vis(rng, nwave=CHANNELS)
    return replace(
        table, visphi=stored, visrefmap=np.broadcast_to(reference, table.visrefmap.shape)
    )


@pytest.mark.parametrize(
    "reference",
    [
        np.ones((CHANNELS, CHANNELS), dtype=bool),
        ~np.eye(CHANNELS, dtype=bool),
        np.tile(FIXED, (CHANNELS, 1)),
    ],
    ids=["all", "all others", "a fixed set"],
)
def test_differences_between_channels_are_those_of_the_star(rng, reference):
    phase = rng.uniform(-10, 10, (6, CHANNELS))
    table = against(rng, phase, reference)
    assert references.understood(table).all()
    ours = table.visphi * references.scale(table)[:, None]
    np.testing.assert_allclose(np.diff(ours), np.diff(phase), atol=1e-13)


def test_another_reference_for_each_channel_is_named(rng):
    file = make.full(rng)
    neighbour = np.roll(np.eye(3, dtype=bool), 1, axis=1)
    file.data[0] = replace(file.data[0], visrefmap=np.broadcast_to(neighbour, (6, 3, 3)))
    (found,) = [problem for problem in check(file) if "VISREFMAP" in problem.what]
    assert "another reference in 6 rows (first: row 1)" in found.what
    (seen,) = observations(file, target="Harrow 7", observables=("visphi",))
    got, stored = (np.reshape(p, (6, 3)) for p in (seen.visphi.value, file.data[0].visphi))
    np.testing.assert_allclose(np.diff(got), np.radians(np.diff(stored)), atol=1e-14)


def test_the_order_of_polynomials_is_read_where_phases_are_differential(rng):
    file = make.full(rng)
    for kind, order in (("differential", 1), ("absolute", 0)):
        file.data[0] = replace(file.data[0], phityp=kind)
        (seen,) = observations(file, target="Harrow 7", observables=("visphi",))
        assert seen.phase_order == order


@pytest.mark.parametrize(
    "reference",
    [np.ones((5, 5), dtype=bool), ~np.eye(5, dtype=bool), np.tile(FIXED, (5, 1))],
    ids=["all", "all others", "a fixed set"],
)
def test_a_cut_of_channels_is_the_same_before_and_after_reading(rng, reference):
    """But for a constant in each row; also in a copy that is written and read again."""
    file = make.full(rng)
    phase = rng.uniform(-10, 10, (6, CHANNELS))
    file.wavelengths[0] = make.spectrum(nwave=CHANNELS)
    file.data = [against(rng, phase, reference)]
    file.correlations, file.polarisations = [], []
    waves = file.wavelengths[0].eff_wave
    cut = Selection(wavelengths=[waves[1] - 1e-8, waves[3] + 1e-8] * u.m)
    (whole,) = observations(file, observables=("visphi",))
    (part,) = observations(select(file, cut), observables=("visphi",))
    inner = np.tile([False, True, True, True, False], 6)
    expected = whole.visphi.select(inner)
    for got, wanted in ((part.visphi.value, expected.value), (part.visphi.error, expected.error)):
        np.testing.assert_allclose(
            np.diff(got.reshape(6, 3)), np.diff(wanted.reshape(6, 3)), atol=1e-13
        )
