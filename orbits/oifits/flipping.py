"""Reversing the sign of all phases of a file, for instruments that use the other convention."""

from dataclasses import replace

import numpy as np

from .correlation import Numbers
from .model import T3, OIFile, Vis

_PHASES = {Vis: ("VISPHI", "IVIS"), T3: ("T3PHI",)}
"""What changes its sign under complex conjugation."""


def flipped(file: OIFile) -> OIFile:
    """`file` as if it had been written with V = integral I exp(+2 pi i (u x + v y)).

    Correlations between a phase and anything else change their sign too.
    """
    numbers = Numbers(file)
    sign = np.ones(numbers.total)
    data = []
    for table in file.data:
        changes = {}
        for name in _PHASES.get(type(table), ()):
            if table[name] is None:
                continue
            changes[name.lower()] = -table[name]
            which = numbers.of(table, f"CORRINDX_{name}")
            if which is not None:
                sign[which[which >= 0]] = -1.0
        data.append(replace(table, **changes) if changes else table)
    correlations = []
    for table in file.correlations:
        i, j, valid = numbers.pairs(table)
        corr = table.corr.copy()
        corr[valid] *= sign[i[valid]] * sign[j[valid]]
        correlations.append(replace(table, corr=corr))
    return replace(file, data=data, correlations=correlations)
