"""Problems: what is wrong with an input, how badly, and what was done about it."""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum

from .errors import InputError


class Severity(IntEnum):
    """How much a problem matters."""

    NOTE = 0
    """A departure from the standard that leaves the data as good as they were."""
    SUSPICIOUS = 1
    """The data were used, but something about them is hard to believe."""
    UNUSABLE = 2
    """What is named was left out."""

    def __str__(self) -> str:
        return self.name.lower()


@dataclass(frozen=True)
class Problem:
    """One fault of a file, in words."""

    severity: Severity
    file: str
    table: str
    """The table, with its HDU number; "" for the file as a whole."""
    what: str
    """What is wrong, with the row, column or keyword."""
    done: str
    """What was done about it."""

    def __str__(self) -> str:
        where = f"{self.table}: " if self.table else ""
        return f"{where}{self.what}; {self.done}"


class Log:
    """Collects the problems of one file."""

    def __init__(self, file: str) -> None:
        self.file = file
        self.problems: list[Problem] = []

    def note(self, table: str, what: str, done: str) -> None:
        """Add a note."""
        self._add(Severity.NOTE, table, what, done)

    def suspicious(self, table: str, what: str, done: str) -> None:
        """Add something suspicious."""
        self._add(Severity.SUSPICIOUS, table, what, done)

    def unusable(self, table: str, what: str, done: str) -> None:
        """Add something that is left out."""
        self._add(Severity.UNUSABLE, table, what, done)

    def _add(self, severity: Severity, table: str, what: str, done: str) -> None:
        self.problems.append(Problem(severity, self.file, table, what, done))


def refuse_suspicious(problems: Sequence[Problem]) -> None:
    """Take what is suspicious as unusable.

    Raises
    ------
    InputError
        If any of `problems` is more than a note; it tells the worst and how many there are.
    """
    serious = [problem for problem in problems if problem.severity > Severity.NOTE]
    if serious:
        worst = max(serious, key=lambda problem: problem.severity)
        more = f" (and {len(serious) - 1} more)" if len(serious) > 1 else ""
        where = f"{worst.table}: " if worst.table else ""
        raise InputError(f"{worst.file}: refused as strictly asked: {where}{worst.what}{more}")
