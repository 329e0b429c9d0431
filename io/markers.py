"""Marks: the places of faults and contacts as lines, triangles and points, for a picture over the drawing.

Written as VTK XML PolyData, an open format that ParaView and others read, in the unit of the files so that it
lies upon them. Cell array ``mark`` counts the marks; field arrays ``text``, ``kind`` and ``unit`` say what each is.
"""

import os
import tempfile
from collections.abc import Iterable, Sequence
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

from .bodies import Body
from .gaps import Shape, touch_tolerance
from .mending import flat_height
from .mesh_units import METRES_PER_UNIT
from .self_contact import self_contacts
from .topology import edges_of
from .triangle_boxes import near_pairs
from .triangle_distance import edge_crossings, pair_distances, slab_gaps

__all__ = ["Mark", "MeetingError", "contact_mark", "fault_marks", "marks_bytes", "write_marks"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Pairs of triangles drawn for one contact; more say nothing new.
_MOST_PAIRS = 20_000
_EXACT = 1024


@dataclass(frozen=True, eq=False)
class Mark:
    """One place to look at.

    Attributes
    ----------
    kind : str
        Code of the fault or kind of the contact.
    text : str
    points : (n, 3) float, m
    lines : (n, 2, 3) float, m
    triangles : (n, 3, 3) float, m
    """

    kind: str
    text: str
    points: FloatArray = field(default_factory=lambda: np.zeros((0, 3)))
    lines: FloatArray = field(default_factory=lambda: np.zeros((0, 2, 3)))
    triangles: FloatArray = field(default_factory=lambda: np.zeros((0, 3, 3)))


class MeetingError(InputError):
    """Conductors meet; `marks` show where.

    Parameters
    ----------
    text : str
    marks : sequence of Mark
    unit : str or None
        Unit of the files.
    """

    def __init__(self, text: str, marks: Sequence[Mark], unit: str | None) -> None:
        super().__init__(text)
        self.marks = tuple(marks)
        self.unit = unit


def contact_mark(a: Shape, b: Shape, kind: str, text: str) -> Mark:
    """Where two bodies touch or cross: the triangles, and the lines along which they pass through each other.

    Parameters
    ----------
    a, b : Shape
    kind, text : str

    Returns
    -------
    Mark
    """
    tolerance = touch_tolerance(a.body, b.body)
    first, second = _touching_pairs(a, b, tolerance)
    lines = _crossing_lines(a.corners[first], b.corners[second], tolerance)
    triangles = np.concatenate([a.corners[np.unique(first)], b.corners[np.unique(second)]])
    return Mark(kind, text, lines=lines, triangles=triangles)


def _touching_pairs(a: Shape, b: Shape, tolerance: float) -> tuple[IntArray, IntArray]:
    found: list[tuple[IntArray, IntArray]] = []
    count = 0
    for i, j, _ in near_pairs(a.tree, b.tree, [tolerance]):
        near = slab_gaps(a.corners[i], a.normals[i], b.corners[j], b.normals[j]) <= tolerance
        i, j = i[near], j[near]
        for start in range(0, len(i), _EXACT):
            one, two = i[start : start + _EXACT], j[start : start + _EXACT]
            close = pair_distances(a.corners[one], b.corners[two])[0] <= tolerance
            found.append((one[close], two[close]))
            count += int(close.sum())
        if count > _MOST_PAIRS:
            break
    if not found:
        return np.zeros(0, np.int64), np.zeros(0, np.int64)
    first, second = (np.concatenate(side)[:_MOST_PAIRS] for side in zip(*found, strict=True))
    return first, second


def _crossing_lines(a: FloatArray, b: FloatArray, tolerance: float) -> FloatArray:
    """Lines along which pairs of triangles pass through each other, (n, 2, 3)."""
    if len(a) == 0:
        return np.zeros((0, 2, 3))
    hits, places = [], []
    for one, other in ((a, b), (b, a)):
        hit, place = edge_crossings(np.stack([one, np.roll(one, -1, axis=1)], axis=2), other[:, None], 0.0)
        hits.append(hit)
        places.append(place)
    hit, place = np.concatenate(hits, axis=1), np.concatenate(places, axis=1)
    row = np.arange(len(a))
    start = place[row, hit.argmax(axis=1)]
    away = np.where(hit, np.linalg.norm(place - start[:, None], axis=2), -1.0)
    stop = place[row, away.argmax(axis=1)]
    long = (hit.sum(axis=1) > 1) & (away.max(axis=1) > tolerance)
    lines: FloatArray = np.stack([start, stop], axis=1)[long]
    return lines


def fault_marks(bodies: Iterable[Body]) -> list[Mark]:
    """Marks of the faults that bodies carry: whole rims, edges and triangles where they are known, else a point.

    Parameters
    ----------
    bodies : iterable of Body
        With their faults.

    Returns
    -------
    list of Mark
    """
    marks = []
    for body in bodies:
        codes = {fault.code for fault in body.faults}
        edges = edges_of(body.triangles) if codes & {"holes", "cracks", "non-manifold-edges"} else None
        touching = 2.0 * flat_height(body)
        crossing = self_contacts(Shape(body), touching)[0] if codes & {"self-crossing", "self-touching"} else None
        for fault in body.faults:
            text = f"{body.name}: {fault.text}"
            if fault.severity == "note":
                continue
            if edges is not None and fault.code in ("holes", "cracks", "non-manifold-edges"):
                wanted = edges.count > 2 if fault.code == "non-manifold-edges" else edges.count == 1
                marks.append(Mark(fault.code, text, lines=body.vertices[edges.ends[wanted]]))
            elif crossing is not None and fault.code in ("self-crossing", "self-touching") and len(crossing):
                rows = np.unique(crossing)
                marks.append(Mark(fault.code, text, triangles=body.vertices[body.triangles[rows]]))
            elif fault.place is not None:
                marks.append(Mark(fault.code, text, points=np.array([fault.place])))
    return marks


def marks_bytes(marks: Sequence[Mark], unit: str | None) -> bytes:
    """Serialise marks.

    Parameters
    ----------
    marks : sequence of Mark
    unit : str or None
        The coordinates are written in it; without one, as they stand.

    Returns
    -------
    bytes
        Content of a `.vtp` file.
    """
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkPoints, vtkStringArray
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData
    from vtkmodules.vtkIOXML import vtkXMLPolyDataWriter

    scale = 1.0 if unit is None else METRES_PER_UNIT[unit]
    data = vtkPolyData()
    points, number = [np.zeros((0, 3))], []
    start = 0
    for size, name, put in ((1, "points", data.SetVerts), (2, "lines", data.SetLines), (3, "triangles", data.SetPolys)):
        cells = vtkCellArray()
        for k, mark in enumerate(marks):
            corners = np.asarray(getattr(mark, name)).reshape(-1, size, 3)
            for cell in range(len(corners)):
                cells.InsertNextCell(size, [start + size * cell + c for c in range(size)])
            points.append(corners.reshape(-1, 3))
            number += [k] * len(corners)
            start += size * len(corners)
        put(cells)
    vtk_points = vtkPoints()
    vtk_points.SetData(numpy_to_vtk(np.ascontiguousarray(np.concatenate(points) / scale), deep=True))
    data.SetPoints(vtk_points)
    array = numpy_to_vtk(np.array(number, dtype=np.int32), deep=True)
    array.SetName("mark")
    data.GetCellData().AddArray(array)
    for key, texts in (
        ("text", [m.text for m in marks]),
        ("kind", [m.kind for m in marks]),
        ("unit", [unit or "file"]),
    ):
        strings = vtkStringArray()
        strings.SetName(key)
        for text in texts:
            strings.InsertNextValue(text)
        data.GetFieldData().AddArray(strings)
    writer = vtkXMLPolyDataWriter()
    writer.SetInputData(data)
    writer.WriteToOutputStringOn()
    writer.SetDataModeToBinary()
    writer.SetCompressorTypeToZLib()
    writer.Write()
    written: str = writer.GetOutputString()
    return written.encode()


def write_marks(path: str | Path, marks: Sequence[Mark], unit: str | None) -> Path:
    """Write marks to a file, whole or not at all.

    Parameters
    ----------
    path : str or Path
        Ends in `.vtp`.
    marks : sequence of Mark
    unit : str or None

    Returns
    -------
    Path

    Raises
    ------
    InputError
        If it cannot be written.
    """
    file = Path(path)
    if file.suffix.lower() != ".vtp":
        raise InputError(f"{file}: marks are written as VTK XML; name a file that ends in .vtp")
    content = marks_bytes(marks, unit)
    try:
        handle, name = tempfile.mkstemp(prefix=".marks-", suffix=".vtp", dir=file.parent)
        try:
            with os.fdopen(handle, "wb") as stream:
                stream.write(content)
            os.chmod(name, 0o644)
            os.replace(name, file)
        except OSError:
            with suppress(OSError):
                os.unlink(name)
            raise
    except OSError as error:
        raise InputError(f"{file}: cannot be written ({error.strerror}); name another file") from None
    return file
