"""What was run, on what, with which versions: kept beside the results, to be run again.

The file ``history.json`` of a folder of results holds the last run of each command.
"""

import hashlib
import json
import os
import platform
from collections.abc import Iterable
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from .errors import InputError
from .files import whole_file

HISTORY = "history.json"
_PACKAGES = ("nodeline", "numpy", "scipy", "astropy", "dynesty", "pandas", "finufft", "numba")


@dataclass(frozen=True, kw_only=True)
class Input:
    """A file as it was when it was read."""

    path: str
    """Relative to the folder that the folder of results stands in."""
    bytes: int
    sha256: str


@dataclass(frozen=True, kw_only=True)
class Run:
    """One run of a command."""

    command: str
    seed: int
    date: str
    """UTC, ISO 8601."""
    versions: dict[str, str]
    inputs: tuple[Input, ...]


def record(folder: Path, name: str, *, command: str, seed: int, inputs: Iterable[Path]) -> None:
    """Keep in `folder` that `command` has been run with `seed` on the files `inputs`.

    It takes the place of an earlier run of the same `name`.
    """
    run = Run(
        command=command,
        seed=seed,
        date=datetime.now(UTC).isoformat(timespec="seconds"),
        versions=versions(),
        inputs=tuple(fingerprint(path, Path(folder).parent) for path in inputs),
    )
    runs = {key: asdict(earlier) for key, earlier in history(folder).items()} | {name: asdict(run)}
    with whole_file(Path(folder) / HISTORY, force=True) as temporary:
        temporary.write_text(json.dumps(runs, indent=2) + "\n", encoding="utf-8")


def history(folder: Path) -> dict[str, Run]:
    """The runs kept in `folder`, by the name of the command; none where nothing was kept.

    Raises
    ------
    InputError
        If the file of that name is not such a history.
    """
    path = Path(folder) / HISTORY
    if not path.is_file():
        return {}
    try:
        tree = json.loads(path.read_text(encoding="utf-8"))
        return {name: _run(run) for name, run in tree.items()}
    except (ValueError, TypeError, KeyError, AttributeError) as error:
        raise InputError(f"{path}: not a history of runs ({error}); remove it") from error


def fingerprint(path: Path, base: Path) -> Input:
    """Size and SHA-256 of a file, its name relative to `base`."""
    path = Path(path)
    with open(path, "rb") as stream:
        digest = hashlib.file_digest(stream, "sha256").hexdigest()
    return Input(path=os.path.relpath(path, base), bytes=path.stat().st_size, sha256=digest)


def versions() -> dict[str, str]:
    """Versions of Python and of the packages that results depend on."""
    found = {"python": platform.python_version()}
    for name in _PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:  # run from a bare checkout
            continue
    return found


def _run(tree: dict[str, Any]) -> Run:
    return Run(**{**tree, "inputs": tuple(Input(**item) for item in tree["inputs"])})
