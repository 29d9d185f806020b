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
    turned = [np.empty(0, dtype=np.int64)]
    data = []
    for table in file.data:
        changes = {}
        for name in _PHASES.get(type(table), ()):
            if table[name] is None:
                continue
            changes[name.lower()] = -table[name]
            which = numbers.of(table, f"CORRINDX_{name}")
            if which is not None:
                turned.append(which.ravel())
        data.append(replace(table, **changes) if changes else table)
    correlations = []
    for table in file.correlations:
        i, j, valid = numbers.pairs(table)
        mixed = valid & (np.isin(i, np.concatenate(turned)) != np.isin(j, np.concatenate(turned)))
        corr = np.where(mixed, -table.corr, table.corr)
        correlations.append(replace(table, corr=corr))
    return replace(file, data=data, correlations=correlations)
