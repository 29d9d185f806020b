"""New live points by a compiled random walk, for dynesty."""

import numpy as np
from dynesty.internal_samplers import InternalSampler, RWalkSampler, SamplerReturn

from ..compiled import compiled
from .target import first_above, value_of

EXCHANGES = 0.5
"""Share of the steps that go by the difference of two live points (ter Braak 2006, Stat. Comput.
16, 239); the others go within the ellipsoid around the start, as dynesty's own."""
WHOLE = 0.3
"""Share of those that go by the whole difference, which leads from one solution to another."""
BLOCK = 16
"""Draws made at once."""


class Everywhere(InternalSampler):
    """Draws from all of the proposal until one lies above the present likelihood."""

    def prepare_sampler(self, **given):
        """Arguments of `sample`."""
        self.sampler_kwargs["target"] = self.input_kwargs["target"]
        return super().prepare_sampler(**given)

    @staticmethod
    def sample(args):
        """Draw a new live point; see `InternalSampler.sample`."""
        target, rng, calls = args.kwargs["target"], args.rseed, 0
        points, out = np.empty((BLOCK, args.u.size - 1)), np.empty(BLOCK)
        while True:
            cube = rng.uniform(size=(BLOCK, args.u.size))
            taken = first_above(args.loglstar, cube, points, out, target.problem)
            if taken < BLOCK:
                break
            calls += BLOCK
        u = cube[taken]
        return SamplerReturn(
            u=u,
            v=u,
            logl=out[taken],
            ncalls=calls + taken + 1,
            tuning_info=None,
            evaluation_history=[],
            proposal_stats={},
        )


class Walk(RWalkSampler):
    """A walk of `walks` steps that never leaves the region above the present likelihood."""

    def prepare_sampler(self, *, nested_sampler=None, **given):
        """Arguments of `sample`, the live points among them."""
        self.sampler_kwargs["live"] = nested_sampler.live_u
        self.sampler_kwargs["target"] = self.input_kwargs["target"]
        return super().prepare_sampler(nested_sampler=nested_sampler, **given)

    @staticmethod
    def sample(args):
        """Walk away from a live point; see `RWalkSampler.sample`."""
        target, rng, count = args.kwargs["target"], args.rseed, args.kwargs["walks"]
        size = args.u.size
        ball = rng.normal(size=(count, size))
        radius = rng.uniform(size=count) ** (1 / size)
        ball *= (radius / np.sqrt(np.square(ball).sum(axis=1)))[:, None]
        steps = args.scale * ball @ args.axes.T
        live = args.kwargs["live"]
        exchange = rng.uniform(size=count) < EXCHANGES
        pairs = live[rng.integers(len(live), size=(2, count))]
        length = np.where(rng.uniform(size=count) < WHOLE, 1.0, rng.exponential(0.5, size=count))
        steps[exchange] = (length[:, None] * (pairs[0] - pairs[1]))[exchange]
        u = args.u.copy()
        accepted, calls, value = take_steps(
            u, steps, exchange, target.turns, args.loglstar, target.problem
        )
        return SamplerReturn(
            u=u,
            v=u,
            logl=value,
            ncalls=count,
            tuning_info={"accept": accepted, "reject": calls - accepted, "scale": args.scale},
            evaluation_history=[],
            proposal_stats={"n_accept": accepted, "n_reject": count - accepted},
        )


@compiled
def take_steps(u, steps, exchange, turns, least, problem):
    """Move `u` by those of the `steps` (n, d) that keep its value above `least`.

    Returns how many steps within the ellipsoid were taken, of how many, and the value in the end.
    """
    trial, point = np.empty_like(u), np.empty(u.size - 1)
    value = value_of(u, problem, point)
    accepted, calls = 0, 0
    for k in range(steps.shape[0]):
        inside = True
        if not exchange[k]:
            calls += 1
        for a in range(u.size):
            trial[a] = u[a] + steps[k, a]
            if turns[a]:
                trial[a] -= np.floor(trial[a])
            if not 0.0 < trial[a] < 1.0:
                inside = False
        if not inside:
            continue
        found = value_of(trial, problem, point)
        if found > least:
            for a in range(u.size):
                u[a] = trial[a]
            value = found
            if not exchange[k]:
                accepted += 1
    return accepted, calls, value
