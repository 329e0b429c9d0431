"""Which unit the numbers of each file are in: its own, or the one stated."""

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from daraf.bem.errors import InputError

from .mesh_units import box_in_plausible_units, length_unit, size_text

if TYPE_CHECKING:
    from .readers import RawFile

__all__ = ["units_of_files"]


def units_of_files(
    raws: "Sequence[RawFile]", stated: str | None, other: str | None, *, needed: bool
) -> list[str | None]:
    """Unit of each file.

    A file that carries a unit keeps it. A stated unit is for the files that carry none, so that both sorts can be
    named together; where all carry one, there is nothing else that it could be meant for, and it must agree.

    Parameters
    ----------
    raws : sequence of RawFile
    stated : str or None
        Unit stated for these files.
    other : str or None
        Unit of files that carry none where none is stated; nothing needs to agree with it.
    needed : bool
        Whether all files must have one; else none of them may.

    Returns
    -------
    list of str or None

    Raises
    ------
    InputError
        If a unit is missing or contradicts the stated one.
    """
    stated = None if stated is None else length_unit(stated)
    if stated is not None and all(raw.unit is not None for raw in raws):
        for raw in raws:
            if raw.unit != stated:
                raise InputError(
                    f"{raw.path}: the file says {raw.unit}, the unit stated is {stated}; state {raw.unit} or none"
                )
    bare = stated or other
    units = [raw.unit or bare for raw in raws]
    if None in units and (needed or any(unit is not None for unit in units)):
        raise InputError(_missing_unit(raws[units.index(None)]))
    return units


def _missing_unit(raw: "RawFile") -> str:
    corners = np.concatenate([part.vertices[part.triangles.ravel()] for part in raw.parts])
    extents = np.ptp(corners, axis=0)
    return (
        f"{raw.path}: the file carries no unit, and none is stated; its bounding box {size_text(extents)} "
        f"would be {box_in_plausible_units(extents)}: state the unit, such as --unit mm (in a case file: unit = 'mm')"
    )
