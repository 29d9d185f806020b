"""Checks of what an OIFITS file says: one small function each, gathered by subject.

A check takes the file and a log, and changes nothing: faults that have to be mended are mended on
reading, and data that cannot be used are recognised by `observables.usable`; the checks put into
words what was found and what became of it.
"""

from ...problems import Log, Problem
from ..model import OIFile
from . import correlations, geometry, repeats, spectra, structure, values

SUBJECTS = (structure, spectra, values, geometry, repeats, correlations)
CHECKS = tuple(one for subject in SUBJECTS for one in subject.CHECKS)


def check(file: OIFile) -> list[Problem]:
    """What is wrong with the contents of `file`, beyond what was found when it was read."""
    log = Log(file.source)
    for one in CHECKS:
        one(file, log)
    return log.problems


def check_together(file: OIFile) -> list[Problem]:
    """What is wrong with files, each sound by itself, that `file` was joined from."""
    log = Log(file.source)
    repeats.between_files(file, log)
    return [*file.clashes, *log.problems]
