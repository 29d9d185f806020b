"""What can go wrong, as a tree.

NodelineError                anything this package raises on purpose
├── InputError               the input is unusable (exit code 3)
└── NothingFound             the work was done, nothing can be claimed (exit code 4)

A plain ``ValueError`` marks a wrong argument to a Python function.
"""


class NodelineError(Exception):
    """Base class; ``str(error)`` is one sentence fit for a person to read."""


class InputError(NodelineError):
    """An input that cannot be used: names the file, the table and row, and what to do."""


class NothingFound(NodelineError):
    """The work was done but found nothing that can be claimed."""
