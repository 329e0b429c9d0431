"""What is in the files of a case: the bodies that it uses, where it puts them."""

from daraf.bem.errors import InputError
from daraf.bem.solution import Notice

from .case import Case
from .inspection import Inspection, inspect_bodies
from .joining import mend_of, unit_told
from .mending import fit_bodies
from .problem import PlacedBodies, placed_bodies
from .progress import ProgressCallback
from .uniting import unite

__all__ = ["inspect_case"]


def inspect_case(
    case: Case, *, marked: bool = False, progress: ProgressCallback | None = None
) -> tuple[Inspection, tuple[Notice, ...]]:
    """Look at every body of a case.

    Parameters
    ----------
    case : Case
        From `load_case` or `make_case`.
    marked : bool
        Whether to draw marks too.
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
    unit = unit_told(case, placed.bodies)
    inspection = inspect_bodies(
        placed.bodies, unit, mend=mend_of(case), marked=marked, owner=placed.owner, progress=progress
    )
    return inspection, (*placed.notices, *_uniting(case, placed, unit))


def _uniting(case: Case, placed: PlacedBodies, unit: str) -> list[Notice]:
    """What a solve unites and leaves out of the conductors of several bodies."""
    several = [k for k, c in enumerate(placed.owner) if placed.owner.count(c) > 1]
    try:
        fitted = fit_bodies([placed.bodies[k] for k in several], mend_of(case))
    except InputError:  # some body has nothing left: its faults say so
        return []
    known = [note for body in fitted for note in body.notes]
    united = unite(fitted, [placed.owner[k] for k in several], mend_of(case))
    changes = [(c, note) for body, c in zip(united.bodies, united.owner, strict=True) for note in body.notes]
    return [
        Notice("mended", f"a solve takes conductor {case.content.conductor[c].name!r} so: {note.said(unit)}")
        for c, note in [*changes, *united.dropped]
        if note not in known
    ]
