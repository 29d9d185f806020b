"""Damage valid OIFITS files at random and use them: scripts/fuzz.py [--cases N] [FILE ...].

Every case runs in a child process: one half `nodeline inspect`, the other reads all observables of
every target and makes them ready for a search. It must end within 10 s and 1 GiB, with the exit
code 0 or 3 (refused), and without a traceback or a warning. Prints what went wrong, with the seed
to repeat it.
"""

import argparse
import io
import os
import resource
import signal
import sys
import tempfile
import time
import traceback
from collections import Counter
from collections.abc import Callable, Sequence
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT / "tests" / "oifits"))

BLOCK = 2880
RADIUS = 20.0
"""How far from the centre a search is made ready for, mas."""
MAX_SECONDS = 10
MAX_BYTES = 2**30
ODD_VALUES = (
    "-1", "0", "1", "255", "1000000000000", "9223372036854775808", "1E308", "-0.5", "T", "'x'",
    "''", "", "'OI_VIS2'", "'1D'", "'999999999D'", "'PD(3)'", "'um'", "(1,2)", "NaN", "'\xe9'",
)  # fmt: skip
SIZES = ("NAXIS", "NAXIS1", "NAXIS2", "BITPIX", "PCOUNT", "GCOUNT", "TFIELDS", "NDATA")
ODD_NUMBERS = (np.nan, np.inf, -np.inf, 0.0, -1.0, 1e300, 5e-324, 1e10, 2.45e6)


def hdus(data: bytes) -> list[bytes]:
    """The HDUs of a valid file."""
    from astropy.io import fits

    with fits.open(io.BytesIO(data)) as opened:
        places = [hdu.fileinfo() for hdu in opened]
    return [data[p["hdrLoc"] : p["datLoc"] + p["datSpan"]] for p in places]


def truncated(data: bytes, rng: np.random.Generator) -> bytes:
    """Cut short anywhere."""
    return data[: rng.integers(0, len(data))]


def bits_flipped(data: bytes, rng: np.random.Generator) -> bytes:
    """Up to 100 bits turned over."""
    damaged = bytearray(data)
    for place in rng.integers(0, len(data), rng.integers(1, 100)):
        damaged[place] ^= 1 << int(rng.integers(8))
    return bytes(damaged)


def card_changed(data: bytes, rng: np.random.Generator) -> bytes:
    """Some header cards with an odd value."""
    return _with_cards(data, rng, lambda name: True)


def size_changed(data: bytes, rng: np.random.Generator) -> bytes:
    """Absurd numbers of rows, columns, axes."""
    return _with_cards(data, rng, lambda name: name in SIZES)


def description_changed(data: bytes, rng: np.random.Generator) -> bytes:
    """Odd names, forms and units of columns, and odd links between tables."""
    heads = ("TTYPE", "TFORM", "TUNIT", "TDIM", "INSNAME", "ARRNAME", "CORRNAME", "EXTNAME")
    return _with_cards(data, rng, lambda name: name.startswith(heads))


def _with_cards(data: bytes, rng, wanted: Callable[[str], bool]) -> bytes:
    damaged = bytearray(data)
    places = [
        place
        for place in range(0, len(data) - 80, 80)
        if data[place + 8 : place + 10] == b"= "
        and wanted(data[place : place + 8].decode("latin-1").strip())
    ]
    for place in rng.choice(places, min(len(places), int(rng.integers(1, 4))), replace=False):
        value = ODD_VALUES[rng.integers(len(ODD_VALUES))]
        damaged[place + 10 : place + 80] = value.rjust(20).ljust(70)[:70].encode("latin-1")
    return bytes(damaged)


def table_dropped(data: bytes, rng: np.random.Generator) -> bytes:
    """Without one of its HDUs."""
    parts = hdus(data)
    del parts[rng.integers(len(parts))]
    return b"".join(parts)


def table_doubled(data: bytes, rng: np.random.Generator) -> bytes:
    """With one HDU twice, the second perhaps damaged."""
    parts = hdus(data)
    copy = parts[rng.integers(1, len(parts))]
    return b"".join([*parts, bits_flipped(copy, rng) if rng.random() < 0.5 else copy])


def tables_shuffled(data: bytes, rng: np.random.Generator) -> bytes:
    """Extensions in another order, some of them missing."""
    first, *rest = hdus(data)
    order = rng.permutation(len(rest))[: rng.integers(1, len(rest) + 1)]
    return b"".join([first, *(rest[k] for k in order)])


def block_overwritten(data: bytes, rng: np.random.Generator) -> bytes:
    """A stretch of zeros, ones or noise."""
    damaged = bytearray(data)
    start = int(rng.integers(len(data)))
    size = min(int(rng.integers(1, 3 * BLOCK)), len(data) - start)
    filling = (bytes(size), b"\xff" * size, rng.bytes(size))[rng.integers(3)]
    damaged[start : start + size] = filling
    return bytes(damaged)


def numbers_changed(data: bytes, rng: np.random.Generator) -> bytes:
    """Odd numbers in the data of the tables."""
    parts = [bytearray(part) for part in hdus(data)]
    for part in parts[1:]:
        start = (bytes(part).index(b"END     ") // BLOCK + 1) * BLOCK
        room = len(part) - start - 8
        for _ in range(int(rng.integers(0, 6)) if room > 0 else 0):
            place = start + int(rng.integers(room))
            odd = np.array(ODD_NUMBERS[rng.integers(len(ODD_NUMBERS))], dtype=">f8")
            part[place : place + 8] = odd.tobytes()
    return b"".join(map(bytes, parts))


def garbage_appended(data: bytes, rng: np.random.Generator) -> bytes:
    """Something behind the end."""
    return data + rng.bytes(int(rng.integers(1, 2 * BLOCK)))


MUTATIONS = (
    truncated, bits_flipped, card_changed, size_changed, description_changed, table_dropped,
    table_doubled, tables_shuffled, block_overwritten, numbers_changed, garbage_appended,
)  # fmt: skip


@dataclass(frozen=True)
class Outcome:
    """How a case ended."""

    seed: int
    way: str
    """What was done with the file: inspect or read."""
    mutation: str
    code: int
    seconds: float
    megabytes: float
    words: str

    @property
    def fault(self) -> str:
        """What was wrong with it; "" if nothing."""
        if self.seconds > MAX_SECONDS:
            return f"took {self.seconds:.1f} s"
        if self.megabytes * 2**20 > MAX_BYTES:
            return f"took {self.megabytes:.0f} MB"
        if "Traceback" in self.words or self.code not in (0, 3):
            return f"exit code {self.code}: {self.words[-2000:]}"
        warnings = [line for line in self.words.splitlines() if "Warning" in line]
        if warnings:
            return warnings[0]
        return ""


def run_case(seed: int, bases: list[bytes], folder: Path) -> Outcome:
    """Damage one of `bases` as `seed` has it, and use it in a child process."""
    rng = np.random.default_rng(seed)
    mutation = MUTATIONS[rng.integers(len(MUTATIONS))]
    path, words = folder / "case.fits", folder / "words.txt"
    path.write_bytes(mutation(bases[rng.integers(len(bases))], rng))
    options = ([], ["--json"], ["--convert", str(folder / "copy.fits"), "--force"])[rng.integers(3)]
    way = ("inspect", "read")[rng.integers(2)]
    start = time.perf_counter()
    child = os.fork()
    if child == 0:
        if way == "inspect":
            _leave_with(lambda: _command("inspect", str(path), *options), words, seed % 2 == 1)
        _leave_with(lambda: _read(path), words, seed % 2 == 1)
    _, status, usage = os.wait4(child, 0)
    seconds = time.perf_counter() - start
    code = os.waitstatus_to_exitcode(status)
    text = words.read_text(errors="replace")
    return Outcome(seed, way, mutation.__name__, code, seconds, usage.ru_maxrss / 1024, text)


def _leave_with(step: Callable[[], int], words: Path, mapped: bool) -> None:
    """In the child: run `step` with its output in a file, then leave for good with its code.

    If `mapped`, small tables are read as otherwise only large ones are.
    """
    from orbits.oifits import blocks

    code = 1
    blocks.LARGE = 1 if mapped else blocks.LARGE
    try:
        signal.alarm(MAX_SECONDS + 1)
        resource.setrlimit(resource.RLIMIT_AS, (4 * MAX_BYTES, 4 * MAX_BYTES))
        with open(words, "w") as out, redirect_stdout(out), redirect_stderr(out):
            try:
                code = step()
            except Exception:
                traceback.print_exc()
    finally:
        os._exit(code)


def _read(path: Path) -> int:
    """Read every target of a file and make it ready for a search; 3 if none can be read."""
    from orbits import InputError, read_epochs
    from orbits.companion.covariance import Covariance
    from orbits.observation import OBSERVABLES
    from orbits.oifits import load
    from orbits.sampling import Sampling

    code = 3
    try:
        names = sorted(set(load(path).target.target.tolist()))
    except InputError:
        return code
    for name in names:
        try:
            for epoch in read_epochs(path, target=name, observables=OBSERVABLES):
                Covariance.of(epoch, Sampling.of(epoch, radius=RADIUS))
            code = 0
        except InputError as error:
            print(error)
    return code


def _command(*arguments: str) -> int:
    """Run nodeline in this process; returns its exit code."""
    from orbits.cli import app
    from orbits.cli.frame import run

    sys.argv = ["nodeline", *arguments]
    return run(app)


def valid_files(folder: Path) -> list[bytes]:
    """Files to damage: a small and a full one, the small one also in the dress of version 1."""
    import oifits_files

    rng = np.random.default_rng(1)
    bases = []
    for make in (oifits_files.small, oifits_files.full):
        path = folder / "base.fits"
        make(rng).write(path, force=True)
        bases.append(path.read_bytes())
    old = bases[0].replace(b"'OIFITS2 '", b"'NOTHING '")
    old = old.replace(b"OI_REVN =                    2", b"OI_REVN =                    1")
    return [*bases, old]


def fuzz(cases: int, first: int = 0, more: Sequence[Path] = ()) -> list[Outcome]:
    """Run seeds `first` to `first + cases`, in order, on our own files and on `more` of them."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        bases = [*valid_files(folder), *(path.read_bytes() for path in more)]
        # Everything that a child needs is imported by a first case in the parent.
        with redirect_stdout(io.StringIO()):
            _command("inspect", str(folder / "base.fits"), "--convert", str(folder / "first.fits"))
            _read(folder / "base.fits")
        return [run_case(seed, bases, folder) for seed in range(first, first + cases)]


def main() -> int:
    """Run the cases and print a summary; returns 1 if any went wrong."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=2000)
    parser.add_argument("--first", type=int, default=0, help="seed of the first case")
    parser.add_argument("files", nargs="*", type=Path, help="files to damage beside our own")
    options = parser.parse_args()
    outcomes = fuzz(options.cases, options.first, options.files)
    for outcome in outcomes:
        if outcome.fault:
            print(f"seed {outcome.seed}, {outcome.way}, {outcome.mutation}: {outcome.fault}\n")
    faults = sum(bool(outcome.fault) for outcome in outcomes)
    codes = Counter(outcome.code for outcome in outcomes)
    print(
        f"{len(outcomes)} cases, {faults} faults; exit codes {dict(sorted(codes.items()))}; "
        f"slowest {max(o.seconds for o in outcomes):.2f} s, "
        f"largest {max(o.megabytes for o in outcomes):.0f} MB"
    )
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
