"""What is in the files of a case: the bodies that it uses, where it puts them."""

from daraf.bem.solution import Notice

from .case import Case
from .inspection import Inspection, inspect_bodies
from .problem import mend_of, placed_bodies

__all__ = ["inspect_case"]


def inspect_case(case: Case, *, marked: bool = False) -> tuple[Inspection, tuple[Notice, ...]]:
    """Look at every body of a case.

    Parameters
    ----------
    case : Case
        From `load_case` or `make_case`.
    marked : bool
        Whether to draw marks too.

    Returns
    -------
    Inspection
        Of the placed bodies.
    tuple of Notice
        Bodies of the files that belong to no conductor, shifts that look like a slip.

    Raises
    ------
    InputError
        If a file, a body or a placement cannot be used.
    """
    placed = placed_bodies(case)
    inspection = inspect_bodies(placed.bodies, case.content.unit, mend=mend_of(case), marked=marked)
    return inspection, placed.notices
