"""What is in the files of a case: the bodies that it uses, where it puts them."""

from daraf.bem.solution import Notice

from .case import Case
from .inspection import Inspection, inspect_bodies
from .problem import placed_bodies
from .progress import ProgressCallback

__all__ = ["inspect_case"]


def inspect_case(case: Case, *, progress: ProgressCallback | None = None) -> tuple[Inspection, tuple[Notice, ...]]:
    """Look at every body of a case.

    Parameters
    ----------
    case : Case
        From `load_case` or `make_case`.
    progress : callable, optional

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
    return inspect_bodies(placed.bodies, case.content.unit, progress=progress), placed.notices
