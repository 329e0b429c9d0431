"""The solved panels as VTK XML PolyData (`surface.vtp`), an open format that ParaView and others read.

Cell arrays: ``conductor`` and ``body`` (index), ``panel_size`` (square root of the area), one
``charge_density_NAME`` per conductor (that conductor at 1 V, all others at 0 V) and, when potentials or
charges were stated, ``charge_density``; ``pass_before_NAME`` are the densities of the pass before;
``facet_offset`` tells how far a panel was moved outward onto the round surface that its facet stands for,
``field_front`` and ``field_back`` how large the stated field is on both sides. Each array carries its unit as
VTK's UNITS_LABEL. The names of the conductors and bodies are field data, and so is ``body_fill``: 1 for a body whose
inside is metal, -1 for the wall of a cavity in one, 0 for sheets and thin shells.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from xml.sax.saxutils import escape

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

__all__ = ["SolvedSurface", "add_array", "add_texts", "read_surface", "surface_bytes"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_UNIT_DENSITY = "C/m2 per V"
#: Arrays of the field on the side of the normals and on the other one.
_SIDES = ("field_front", "field_back")


@dataclass(frozen=True, eq=False)
class SolvedSurface:
    """Panels and charge densities as stored in a result.

    Attributes
    ----------
    corners : (n, 4, 3) float, m
        A triangle repeats its third corner.
    n_corners : (n,) int
    conductor, body : (n,) int
    conductor_names, body_names : tuple of str
    densities : (n_conductors, n) float, C/m2 per V
    density : (n,) float, C/m2, or None
        For the stated excitation.
    facet_offset : (n,) float, m, or None
        How far each panel was moved outward onto the round surface meant.
    body_fill : (n_bodies,) int or None
        1 where the inside of a body is metal, -1 where it is a cavity in metal, else 0.
    field_sides : (2, n) float, V/m, or None
        Size of the field on the side of the normals and on the other one, as stated.
    previous : (n_conductors, n) float, C/m2 per V, or None
        Densities of the pass before: what they differ by tells how far a field can be trusted.
    """

    corners: FloatArray
    n_corners: IntArray
    conductor: IntArray
    body: IntArray
    conductor_names: tuple[str, ...]
    body_names: tuple[str, ...]
    densities: FloatArray
    density: FloatArray | None
    facet_offset: FloatArray | None = None
    body_fill: IntArray | None = None
    field_sides: FloatArray | None = None
    previous: FloatArray | None = None


def surface_bytes(surface: SolvedSurface, *, title: str = "") -> bytes:
    """Serialise solved panels.

    Parameters
    ----------
    surface : SolvedSurface
    title : str

    Returns
    -------
    bytes
        Content of a `.vtp` file, binary and compressed.
    """
    from vtkmodules.vtkIOXML import vtkXMLPolyDataWriter

    data = _poly_data(surface)
    cells = data.GetCellData()
    add_array(cells, "conductor", surface.conductor.astype(np.int32), "")
    add_array(cells, "body", surface.body.astype(np.int32), "")
    add_array(cells, "panel_size", np.sqrt(_areas(surface.corners)), "m")
    for name, density in zip(surface.conductor_names, surface.densities, strict=True):
        add_array(cells, f"charge_density_{name}", density, _UNIT_DENSITY)
    if surface.previous is not None:
        for name, density in zip(surface.conductor_names, surface.previous, strict=True):
            add_array(cells, f"pass_before_{name}", density, _UNIT_DENSITY)
    if surface.density is not None:
        add_array(cells, "charge_density", surface.density, "C/m2")
    if surface.facet_offset is not None:
        add_array(cells, "facet_offset", surface.facet_offset, "m")
    if surface.field_sides is not None:
        for name, side in zip(_SIDES, surface.field_sides, strict=True):
            add_array(cells, name, side, "V/m")
    if surface.body_fill is not None:
        add_array(data.GetFieldData(), "body_fill", surface.body_fill.astype(np.int32), "")
    for key, texts in (
        ("title", (title,)),
        ("conductor_names", surface.conductor_names),
        ("body_names", surface.body_names),
    ):
        add_texts(data.GetFieldData(), key, texts)

    writer = vtkXMLPolyDataWriter()
    writer.SetInputData(data)
    # To memory first: written to a file by VTK, a full disk is a message on its own window and no exception.
    writer.WriteToOutputStringOn()
    writer.SetDataModeToBinary()
    writer.SetCompressorTypeToZLib()
    writer.Write()
    text: str = writer.GetOutputString()
    return text.encode()


def read_surface(path: str | Path) -> SolvedSurface:
    """Read the `surface.vtp` of a result.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    SolvedSurface

    Raises
    ------
    InputError
        If the file is missing or not of this kind.
    """
    from vtkmodules.vtkIOXML import vtkXMLPolyDataReader

    file = Path(path)
    try:
        content = file.read_bytes()
    except OSError as error:
        raise InputError(f"{file}: cannot be read ({error.strerror}); solve the case again") from None
    reader = vtkXMLPolyDataReader()
    reader.ReadFromInputStringOn()
    reader.SetInputString(content.decode("utf-8", "replace"))
    if b"</VTKFile>" not in content[-200:] or not reader.CanReadFile(str(file)):
        raise InputError(f"{file}: no complete surface file of a result; solve the case again")
    reader.Update()
    return _from_poly_data(reader.GetOutput(), file)


def _poly_data(surface: SolvedSurface) -> Any:
    from vtkmodules.util.numpy_support import numpy_to_vtk, numpy_to_vtkIdTypeArray
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData

    used = np.arange(4) < surface.n_corners[:, None]
    # Neighbours share their corners, as every viewer expects; equal means equal to the last bit.
    points, index = np.unique(surface.corners[used] + 0.0, axis=0, return_inverse=True)
    offsets = np.concatenate([[0], np.cumsum(surface.n_corners)])
    cells = vtkCellArray()
    cells.SetData(
        numpy_to_vtkIdTypeArray(np.ascontiguousarray(offsets, dtype=np.int64), deep=True),
        numpy_to_vtkIdTypeArray(np.ascontiguousarray(index.reshape(-1), dtype=np.int64), deep=True),
    )
    vtk_points = vtkPoints()
    vtk_points.SetData(numpy_to_vtk(np.ascontiguousarray(points), deep=True))
    data = vtkPolyData()
    data.SetPoints(vtk_points)
    data.SetPolys(cells)
    return data


def _areas(corners: FloatArray) -> FloatArray:
    diagonal, other = corners[:, 2] - corners[:, 0], corners[:, 3] - corners[:, 1]
    areas: FloatArray = 0.5 * np.linalg.norm(np.cross(diagonal, other), axis=1)
    return areas


def add_array(attributes: Any, name: str, values: NDArray[Any], unit: str) -> None:
    """Add an array with its unit to the attributes of a VTK data set."""
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkDataArray

    array = numpy_to_vtk(np.ascontiguousarray(values), deep=True)
    array.SetName(escape(name, {'"': "&quot;"}))  # VTK writes names as they are, also what XML takes for markup
    if unit:
        array.GetInformation().Set(vtkDataArray.UNITS_LABEL(), unit)
    attributes.AddArray(array)


def add_texts(attributes: Any, name: str, texts: Sequence[str]) -> None:
    """Add texts to the field data of a VTK data set."""
    from vtkmodules.vtkCommonCore import vtkStringArray

    array = vtkStringArray()
    array.SetName(name)
    for text in texts:
        array.InsertNextValue(text)
    attributes.AddArray(array)


def _from_poly_data(data: Any, file: Path) -> SolvedSurface:
    from vtkmodules.util.numpy_support import vtk_to_numpy

    def texts(name: str) -> tuple[str, ...]:
        array = data.GetFieldData().GetAbstractArray(name)
        return tuple(array.GetValue(k) for k in range(array.GetNumberOfValues())) if array else ()

    def numbers(name: str) -> NDArray[Any] | None:
        array = data.GetCellData().GetArray(name)
        return None if array is None else vtk_to_numpy(array).copy()

    fill = data.GetFieldData().GetArray("body_fill")
    names = texts("conductor_names")
    conductor, body = numbers("conductor"), numbers("body")
    densities = [numbers(f"charge_density_{name}") for name in names]
    found = [row for row in densities if row is not None]
    if not names or conductor is None or body is None or len(found) < len(names) or not data.GetPoints():
        raise InputError(f"{file}: lacks the arrays of a result; solve the case again")
    points = vtk_to_numpy(data.GetPoints().GetData())
    offsets = vtk_to_numpy(data.GetPolys().GetOffsetsArray()).astype(np.int64)
    index = vtk_to_numpy(data.GetPolys().GetConnectivityArray()).astype(np.int64)
    n_corners = np.diff(offsets)
    slots = offsets[:-1, None] + np.minimum(np.arange(4), n_corners[:, None] - 1)
    sides = [numbers(name) for name in _SIDES]
    before = [numbers(f"pass_before_{name}") for name in names]
    return SolvedSurface(
        corners=np.ascontiguousarray(points[index[slots]], dtype=np.float64),
        n_corners=n_corners,
        conductor=conductor.astype(np.int64),
        body=body.astype(np.int64),
        conductor_names=names,
        body_names=texts("body_names"),
        densities=np.array(found, dtype=np.float64),
        density=numbers("charge_density"),
        facet_offset=numbers("facet_offset"),
        body_fill=None if fill is None else vtk_to_numpy(fill).astype(np.int64),
        field_sides=None if any(side is None for side in sides) else np.array(sides, dtype=np.float64),
        previous=None if any(row is None for row in before) else np.array(before, dtype=np.float64),
    )
