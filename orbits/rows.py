"""Rows: several arrays that share their first axis, kept together in a frozen dataclass."""

from collections.abc import Sequence
from dataclasses import fields
from typing import Self

import numpy as np


class Rows:
    """Base of dataclasses all of whose fields are arrays of the same length."""

    def __len__(self) -> int:
        return len(getattr(self, fields(self)[0].name))

    def select(self, keep: np.ndarray) -> Self:
        """The rows that `keep`, a boolean or index array, names."""
        return type(self)(**{f.name: getattr(self, f.name)[keep] for f in fields(self)})

    @classmethod
    def concatenate(cls, parts: Sequence[Self]) -> Self:
        """All rows of `parts`, in their order."""
        return cls(
            **{f.name: np.concatenate([getattr(p, f.name) for p in parts]) for f in fields(cls)}
        )
