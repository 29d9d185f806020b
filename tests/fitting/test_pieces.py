"""Interrupted fits: what is finished is kept, used if nothing changed, and removed in the end."""

import os
import queue
import signal
import threading
import time
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np
import pytest
from made_binaries import binary, moving, seen

from orbits import Model, Priors, fit
from orbits.fitting import explore
from orbits.fitting.data import make_data
from orbits.fitting.pieces import Kept, fingerprint
from orbits.fitting.target import Target


class StopError(Exception):
    """Stands for Ctrl-C."""


@pytest.fixture
def solve(monkeypatch):
    """Fit with pieces kept in a folder; `stop` interrupts it before that run of nested sampling."""
    rng = np.random.default_rng(11)
    positions, velocities = seen(binary(), 12, rng), moving(binary(), 15, rng)
    priors = Priors.for_data(positions, velocities, period=(20.0, 1000.0))
    real = explore.sample

    def call(folder, *, stop=None, seed=3, live_points=300, cores=1):
        count, heard = [], []

        def sample(*given, **named):
            count.append(1)
            if len(count) == stop:
                raise StopError
            return real(*given, **named)

        monkeypatch.setattr(explore, "sample", sample)
        solution = fit(
            positions,
            velocities=velocities,
            priors=priors,
            live_points=live_points,
            cores=cores,
            rng=np.random.default_rng(seed),
            keep=Kept(folder, heard.append),
        )
        return solution, len(count), heard

    return call


def told(solution):
    tree = solution.to_json()
    tree.pop("seconds", None)
    return tree, solution.samples.to_numpy().tolist()


def test_a_continued_fit_equals_one_that_was_never_interrupted(solve, tmp_path):
    """All digits of all samples; only the runs that were missing are made."""
    whole, runs, heard = solve(tmp_path / "whole")
    assert (runs, heard) == (explore.RUNS, [])
    with pytest.raises(StopError):
        solve(tmp_path / "part", stop=4)
    kept = len(list(tmp_path.glob("part/*/solutions-*.npz")))
    assert kept >= 3
    continued, runs, heard = solve(tmp_path / "part", cores=2)
    assert runs == explore.RUNS - kept > 0
    assert f"continuing an interrupted fit from {kept + 2} pieces" in heard[0]
    assert told(continued) == told(whole)
    # The time of the last part would pass for that of the fit.
    assert whole.account["seconds"] > 0
    assert "seconds" not in continued.account


def test_changed_settings_begin_anew(solve, tmp_path):
    with pytest.raises(StopError):
        solve(tmp_path, stop=4)
    for change in ({"seed": 4}, {"live_points": 320}):
        _, runs, heard = solve(tmp_path, **change)
        assert (runs, heard) == (explore.RUNS, [])


@pytest.fixture
def left(tmp_path):
    """Pieces of fit "a" in a folder, which the Kept that made them cannot clear any more."""
    Kept(tmp_path / "unfinished").of("a").take("scan", Piece, lambda: Piece(np.zeros(1), 0))
    return tmp_path / "unfinished"


def test_nothing_is_left_and_nothing_else_is_removed(left):
    """Half-written pieces go too; what is not a piece stays."""
    kept = Kept(left)
    kept.of("a")
    (left / "a" / ".scan-half.npz").write_text("")
    (left / "mine.txt").write_text("a note")
    kept.clear()
    assert [path.name for path in left.iterdir()] == ["mine.txt"]
    (left / "mine.txt").unlink()
    kept.clear()
    assert not left.exists()


def test_pieces_of_another_fit_stay_for_a_week(left):
    """Those a second process is making; nobody comes back for those of last month."""
    kept = Kept(left)
    kept.of("b").take("scan", Piece, lambda: Piece(np.zeros(1), 0))
    kept.clear()
    assert [path.relative_to(left).as_posix() for path in left.rglob("*.npz")] == ["a/scan.npz"]
    for days, there in ((6, True), (8, False)):
        moment = time.time() - days * 86400
        os.utime(left / "a", (moment, moment))
        Kept(left).clear()
        assert left.exists() == there


def test_ctrl_c_is_answered_while_the_pieces_at_work_go_on(monkeypatch, tmp_path):
    """A piece at work ends only when the word was said: the answer does not wait for it."""
    said, heard, in_time, first = threading.Event(), [], queue.Queue(), iter([True])

    def hear(text):
        heard.append(text)
        said.set()

    def sample(*given, **named):
        if next(first, False):
            signal.pthread_kill(threading.main_thread().ident, signal.SIGINT)
        in_time.put(said.wait(5.0))  # far more than two threads need; a failure lasts as long
        return Piece(np.zeros(1), 0)

    @contextmanager
    def here(count):
        yield lambda function, *given, **named: function(*given, **named)

    monkeypatch.setattr(explore, "_processes", here)
    monkeypatch.setattr(explore, "sample", sample)
    positions = seen(binary(), 4, np.random.default_rng(1))
    priors = Priors.for_data(positions, None)
    target = Target.prior(make_data(positions, None, None, priors, Model()))
    work = explore.Work(live_points=100, cores=2, pieces=Kept(tmp_path, hear))
    with pytest.raises(KeyboardInterrupt):
        explore._run(target, "priors", work, np.random.default_rng(1))
    assert heard == ["stopping when the pieces at work are done"]
    assert in_time.get(timeout=10.0)  # of a thread that may be left to itself


@dataclass(frozen=True)
class Piece:
    """Two numbers."""

    values: np.ndarray
    count: int


def test_pieces_that_cannot_be_read_are_made_again(tmp_path):
    """Half a file, something else, and a pickle, which must not be opened."""
    made = Piece(np.arange(3.0), 2)
    kept = Kept(tmp_path)
    kept.take("good", Piece, lambda: made)
    read = kept.take("good", Piece, lambda: pytest.fail("it is there"))
    assert read.values.tolist() == [0, 1, 2]
    assert read.count == 2
    half = (tmp_path / "good.npz").read_bytes()
    (tmp_path / "half.npz").write_bytes(half[: len(half) // 2])
    (tmp_path / "text.npz").write_text("no piece")
    np.savez(tmp_path / "pickle.npz", values=np.array([{}], dtype=object), count=1)
    np.savez(tmp_path / "other.npz", wrong=1.0)
    for name in ("half", "text", "pickle", "other", "none"):
        assert kept.take(name, Piece, lambda: made) is made


def test_the_fingerprint_tells_every_part():
    """One digit, the shape or the type of an array, a text, the order."""
    array = np.arange(4.0)
    other = array.copy()
    other[2] = np.nextafter(2.0, 3.0)
    parts = [(array,), (other,), (array.reshape(2, 2),), (array.astype(int),), ("a", "b"),
             ("b", "a"), ("ab",), ((array, "a"), "b"), (array, "a", "b")]  # fmt: skip
    assert len({fingerprint(*part) for part in parts}) == len(parts)
    assert fingerprint(array) == fingerprint(np.arange(8.0)[:4])
