"""Errors of daraf.

::

    DarafError
    ├── InputError (also a ValueError)   bad input: one clear line, exit code 2
    │   └── MemoryRefused                the job would not fit into memory
    └── NumericalError                   a guard of ours failed: a defect, never the user's fault
"""

__all__ = ["DarafError", "InputError", "MemoryRefused", "NumericalError"]


class DarafError(Exception):
    """Base of every error that daraf raises on purpose."""


class InputError(DarafError, ValueError):
    """The input cannot be used; the text names the place, what is wrong and what to do."""


class MemoryRefused(InputError):
    """The job would need more memory than is free or allowed; the text says what would fit."""


class NumericalError(DarafError):
    """A numerical guard failed (for example a matrix that must be positive definite is not)."""
