"""Bodies: connected pieces of mesh, read from files, named, in metres."""

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

from .changes import Change, Mend
from .file_units import units_of_files
from .mesh_units import METRES_PER_UNIT, length_unit
from .names import printable
from .stitching import stitch
from .topology import compacted, connected_pieces
from .welding import check_shape, weld

if TYPE_CHECKING:
    from .facet_tolerance import FacetTolerance
    from .readers import RawPart

__all__ = ["Body", "Fault", "MeshSet", "pick_bodies", "read_bodies", "read_mesh_set"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Pick = str | int | Sequence[str | int]


@dataclass(frozen=True)
class Fault:
    """Something about a body that a reader of the drawing should know.

    Attributes
    ----------
    code : str
        Stable word for scripts, such as ``holes``.
    severity : {"note", "warning", "error"}
        Legitimate but worth saying; mended or tolerable; not fit to solve.
    count : int
    place : tuple of 3 float or None, m
        Where the first of them is.
    text : str
        What is wrong.
    remedy : str
        What to do.
    """

    code: str
    severity: str
    count: int
    place: tuple[float, float, float] | None
    text: str
    remedy: str


@dataclass(frozen=True, eq=False)
class Body:
    """One connected piece of mesh.

    Attributes
    ----------
    name : str
        Unique among the bodies read together.
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int
    file : str
    index_in_file : int
        From 1, in the order of the file.
    faults : list of Fault
        What reading alone showed; `inspect_bodies` finds the rest.
    notes : list of Change
        Every change made to the geometry.
    solid : int
        Which part (solid, object) of the file it came from, from 1.
    spacing : float, m
        Rounding of the coordinates as stored in the file, half a step.
    unit : str or None
        Unit of the file.
    side_files : tuple of str
        Files that this file names and that were read with it.
    """

    name: str
    vertices: FloatArray
    triangles: IntArray
    file: str = ""
    index_in_file: int = 1
    faults: list[Fault] = field(default_factory=list)
    notes: list[Change] = field(default_factory=list)
    solid: int = 1
    spacing: float = 0.0
    unit: str | None = None
    side_files: tuple[str, ...] = ()

    @cached_property
    def box(self) -> FloatArray:
        """Lower and upper corner of the bounding box, (2, 3) m."""
        used = self.vertices[self.triangles.ravel()]
        return np.array([used.min(axis=0), used.max(axis=0)])

    @cached_property
    def diagonal(self) -> float:
        """Diagonal of the bounding box, m."""
        return float(np.linalg.norm(np.diff(self.box, axis=0)))


@dataclass(frozen=True, eq=False)
class MeshSet:
    """Bodies of several files, and the unit they were read in (None: unknown, then 1 unit = 1 "m")."""

    bodies: list[Body]
    unit: str | None
    files: list[str]


def read_bodies(
    paths: str | Path | Iterable[str | Path],
    unit: str | None,
    *,
    pick: Pick | None = None,
    other_unit: str | None = None,
    facet_tolerance: "FacetTolerance | None" = None,
    mend: Mend | None = None,
) -> list[Body]:
    """Read mesh files and split them into named bodies.

    Equal vertices are merged with a tolerance relative to the size of the part, and cracks are sewn as far as
    `mend` allows; nothing else is changed.

    Parameters
    ----------
    paths : str, Path or several
        STL, OBJ, PLY, OFF, GLB, glTF, 3MF and STEP, told apart by extension; also zipped or gzipped.
    unit : str or None
        Unit of those files that carry none, one of ``m, cm, mm, um, in, mil, ft``. GLB, glTF, 3MF and STEP carry
        their own; if all of the files do, what is stated here must agree.
    pick : str, int or several, optional
        Names, or numbers from 1 in reading order, of the bodies wanted; all by default.
    other_unit : str, optional
        Unit of files that carry none where `unit` is not stated; files that carry one need not agree with it.
    facet_tolerance : FacetTolerance, optional
        Largest distance of facets from the curved shapes of STEP files; chosen from the size by default.
    mend : Mend, optional
        How far cracks are sewn.

    Returns
    -------
    list of Body

    Raises
    ------
    InputError
        If a file is unusable, the unit is missing or contradicts the file, or a picked body does not exist.
    """
    read = read_mesh_set(
        paths, unit, unit_needed=True, other_unit=other_unit, facet_tolerance=facet_tolerance, mend=mend
    )
    return read.bodies if pick is None else pick_bodies(read.bodies, pick)


def read_mesh_set(
    paths: str | Path | Iterable[str | Path],
    unit: str | None,
    *,
    unit_needed: bool,
    other_unit: str | None = None,
    facet_tolerance: "FacetTolerance | None" = None,
    mend: Mend | None = None,
) -> MeshSet:
    """As `read_bodies`, but a missing unit may stand: the vertices are then in the unit of the files.

    Parameters
    ----------
    paths : str, Path or several
    unit : str or None
    unit_needed : bool
    other_unit : str, optional
    facet_tolerance : FacetTolerance, optional
    mend : Mend, optional

    Returns
    -------
    MeshSet

    Raises
    ------
    InputError
        As `read_bodies`.
    """
    from .readers import may_be_curved, read_file

    names = [paths] if isinstance(paths, str | Path) else list(paths)
    if not names:
        raise InputError("no mesh file is named; name at least one")
    stated = None if unit is None else length_unit(unit)
    if facet_tolerance is not None and not any(may_be_curved(name) for name in names):
        raise InputError(f"{names[0]}: is facets as drawn, so a facet tolerance says nothing; leave it out")
    mend = mend or Mend()
    raws = [read_file(path, facet_tolerance) for path in names]
    units = units_of_files(raws, stated, other_unit, needed=unit_needed)
    if (mend.within or mend.holes) and None in units:
        bare = raws[units.index(None)].path
        raise InputError(f"{bare}: a length for mending is stated, but no unit; state it, such as --unit mm")
    bodies: list[Body] = []
    for raw, file_unit in zip(raws, units, strict=True):
        told = [Fault(one.code, "note", 1, None, one.text, one.remedy) for one in raw.remarks]
        for body in _split(raw.path, raw.parts, file_unit, mend):
            bodies.append(replace(body, faults=[*told, *body.faults], side_files=raw.side_files))
    return MeshSet(_unique_names(bodies), stated or units[0], [str(name) for name in names])


def _split(path: Path, parts: list["RawPart"], unit: str | None, mend: Mend) -> list[Body]:
    """Weld every part, sew its cracks, cut it into connected pieces, name them."""
    scale = 1.0 if unit is None else METRES_PER_UNIT[unit]
    bodies: list[Body] = []
    for number, part in enumerate(parts, start=1):
        vertices, triangles, n_moved, tolerance = weld(part.vertices, part.triangles)
        check_shape(path, part.name, vertices, triangles, part.spacing)
        notes = []
        if n_moved:
            text = f"merged {n_moved} {'vertex' if n_moved == 1 else 'vertices'} beside another one"
            notes.append(Change("merged-vertices", n_moved, None, text, tolerance * scale))
        vertices, triangles, sewn, cracks = _sewn(vertices, triangles, part.spacing, scale, mend)
        n_pieces, piece = connected_pieces(triangles)
        name = printable(part.name)
        named = name or printable(path.stem) or "file"
        numbered = n_pieces > 1 or (not name and len(parts) > 1)
        order = np.argsort(piece, kind="stable")
        for k, rows in enumerate(np.split(order, np.cumsum(np.bincount(piece))[:-1]), start=1):
            used, index = compacted(triangles[rows], len(vertices))
            body = Body(
                name=f"{named}-{k}" if numbered else named,
                vertices=np.ascontiguousarray(vertices[used] * scale),
                triangles=index,
                file=str(path),
                index_in_file=len(bodies) + 1,
                faults=list(cracks),
                notes=[*notes, *sewn],
                solid=number,
                spacing=part.spacing * scale,
                unit=unit,
            )
            bodies.append(body)
    return bodies


def _sewn(
    vertices: FloatArray, triangles: IntArray, spacing: float, scale: float, mend: Mend
) -> tuple[FloatArray, IntArray, list[Change], list[Fault]]:
    """Sew the cracks of one part, or say where they are: its faces may not even hang together before."""
    size = float(np.linalg.norm(np.ptp(vertices, axis=0)))
    rounding = max(2.0 * spacing, 1e-9 * size) * scale
    reach = mend.reach(rounding, size * scale)
    found = stitch(vertices, triangles, reach / scale)
    if found.changed and mend.changes:
        change = Change("sewn", found.count, _place(found.place * scale), f"sewed {found.text}", found.moved * scale)
        return found.vertices, found.triangles, [change], []
    if not found.changed:  # what a bolder reach would sew is worth a word if it closes most of the rim
        found = stitch(vertices, triangles, Mend("bold").reach(rounding, size * scale) / scale)
        if not found.changed or 2 * found.n_open > found.n_open_before:
            return vertices, triangles, [], []
    remedy = "a solve sews them" if mend.reach(rounding, 0.0) > found.moved * scale else "bold mending sews them"
    share = f"{found.text}, up to {found.moved / size:.2g} of the part apart"
    fault = Fault("cracks", "warning", found.count, _place(found.place * scale), share, remedy)
    return vertices, triangles, [], [fault]


def _place(point: FloatArray) -> tuple[float, float, float]:
    x, y, z = point
    return float(x), float(y), float(z)


def _unique_names(bodies: list[Body]) -> list[Body]:
    """Append ``-2``, ``-3`` ... to names that were used before."""
    wanted = {body.name for body in bodies}
    taken: set[str] = set()
    result = []
    for body in bodies:
        name, k = body.name, 1
        while name in taken or (k > 1 and name in wanted):
            k += 1
            name = f"{body.name}-{k}"
        taken.add(name)
        result.append(body if name == body.name else replace(body, name=name))
    return result


def pick_bodies(bodies: list[Body], pick: Pick) -> list[Body]:
    """Bodies by name or by number from 1; ``"all"`` for all of them.

    Parameters
    ----------
    bodies : list of Body
    pick : str, int or several

    Returns
    -------
    list of Body
        In the order asked, none twice.

    Raises
    ------
    InputError
        If a name or number does not exist.
    """
    by_name = {body.name: k for k, body in enumerate(bodies)}
    chosen: list[int] = []
    for item in [pick] if isinstance(pick, str | int) else pick:
        if item == "all" and "all" not in by_name:
            found = list(range(len(bodies)))
        elif isinstance(item, str):
            found = [by_name[item]] if item in by_name else []
        else:
            found = [int(item) - 1] if 1 <= item <= len(bodies) else []
        if not found:
            raise InputError(_no_such_body(bodies, item))
        chosen.extend(k for k in found if k not in chosen)
    return [bodies[k] for k in chosen]


def _no_such_body(bodies: list[Body], item: str | int) -> str:
    files = ", ".join(dict.fromkeys(body.file for body in bodies))
    names = [body.name for body in bodies]
    if not isinstance(item, str):
        return f"{files}: there is no body number {item}; they are numbered 1 to {len(bodies)}"
    near = difflib.get_close_matches(item, names, n=1)
    hint = f" (did you mean {near[0]!r}?)" if near else ""
    listed = ", ".join(repr(name) for name in names[:12]) + (", ..." if len(names) > 12 else "")
    return f"{files}: there is no body named {item!r}{hint}; there are {listed}"
