"""Potentials and fields as files: CSV for points and lines, VTK's open XML formats for the rest."""

import csv
import io
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.field_lines import FieldLine
from daraf.bem.probing import Probed

from .mesh_units import METRES_PER_UNIT
from .places import Places
from .text_file import write_text

__all__ = ["field_csv", "lines_csv", "lines_vtp", "places_vtk", "write_field"]

FloatArray = NDArray[np.float64]

_VALUES = (
    "potential_V",
    "potential_uncertainty_V",
    "field_x_V_per_m",
    "field_y_V_per_m",
    "field_z_V_per_m",
    "field_V_per_m",
    "field_uncertainty_V_per_m",
    "metal",
)


def field_csv(places: Places, probed: Probed, names: Sequence[str], unit: str) -> str:
    """Table of points: place in the unit, potential, field and their uncertainties; the conductor where it is metal.

    Parameters
    ----------
    places : Places
    probed : Probed
    names : sequence of str
        Of the conductors.
    unit : str

    Returns
    -------
    str
    """
    lead: dict[str, Sequence[Any]] = dict(places.carried)
    if places.kind == "line":
        along = np.linalg.norm(places.points - places.points[0], axis=1) / METRES_PER_UNIT[unit]
        lead["distance_" + unit] = [_number(x) for x in along]
    return _table(lead, places.points, probed, names, unit)


def lines_csv(lines: Sequence[FieldLine], probed: Sequence[Probed], names: Sequence[str], unit: str) -> str:
    """Table of field lines, one below the other; columns as in `field_csv`, with the line and the way along it.

    Parameters
    ----------
    lines : sequence of FieldLine
    probed : sequence of Probed
    names : sequence of str
    unit : str

    Returns
    -------
    str
    """
    texts = []
    for k, (line, found) in enumerate(zip(lines, probed, strict=True), 1):
        along = [_number(x) for x in line.distance / METRES_PER_UNIT[unit]]
        lead: dict[str, Sequence[Any]] = {"line": [k] * len(along), "distance_" + unit: along}
        text = _table(lead, line.points, found, names, unit)
        texts.append(text if k == 1 else text.split("\n", 1)[1])
    return "".join(texts)


def _table(lead: dict[str, Sequence[Any]], points: FloatArray, probed: Probed, names: Sequence[str], unit: str) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([*lead, *(f"{axis}_{unit}" for axis in "xyz"), *_VALUES])
    strength = probed.strength
    for k, point in enumerate(points / METRES_PER_UNIT[unit]):
        row = [column[k] for column in lead.values()]
        row += [_number(x) for x in point]
        row += [_number(probed.potential[k]), _number(probed.potential_uncertainty[k], 3)]
        row += [_number(x) for x in probed.field[k]]
        row += [_number(strength[k]), _number(probed.field_uncertainty[k], 3)]
        writer.writerow([*row, names[probed.inside[k]] if probed.inside[k] >= 0 else ""])
    return stream.getvalue()


def _number(value: float, digits: int = 9) -> str:
    return f"{value + 0.0:.{digits}g}"


def places_vtk(places: Places, probed: Probed, title: str) -> tuple[str, str]:
    """Plane or box as VTK XML; lengths in metres.

    Parameters
    ----------
    places : Places
    probed : Probed
    title : str

    Returns
    -------
    text : str
    extension : str
        ".vti" (image data) along the axes of the drawing, ".vts" (structured grid) otherwise.
    """
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkImageData, vtkStructuredGrid
    from vtkmodules.vtkIOXML import vtkXMLImageDataWriter, vtkXMLStructuredGridWriter

    low, high = places.points.min(axis=0), places.points.max(axis=0)
    straight = places.kind == "box" or bool(places.axes)
    counts = _counts(places)
    data: Any
    if straight:
        data = vtkImageData()
        data.SetDimensions(*counts)
        data.SetOrigin(*low)
        data.SetSpacing(*[(b - a) / (n - 1) if n > 1 else 1.0 for a, b, n in zip(low, high, counts, strict=True)])
    else:
        data = vtkStructuredGrid()
        data.SetDimensions(*counts)
        points = vtkPoints()
        points.SetData(numpy_to_vtk(np.ascontiguousarray(places.points), deep=True))
        data.SetPoints(points)
    _add_values(data, probed, title)
    writer = vtkXMLImageDataWriter() if straight else vtkXMLStructuredGridWriter()
    return _written(writer, data), ".vti" if straight else ".vts"


def _counts(places: Places) -> list[int]:
    if not places.axes:
        return [*places.shape, 1, 1][:3]
    counts = [1, 1, 1]
    for axis, count in zip(places.axes, places.shape, strict=True):
        counts["xyz".index(axis)] = count
    return counts


def lines_vtp(lines: Sequence[FieldLine], probed: Sequence[Probed], title: str) -> str:
    """Field lines as VTK XML PolyData; lengths in metres.

    Parameters
    ----------
    lines : sequence of FieldLine
    probed : sequence of Probed
    title : str

    Returns
    -------
    str
    """
    from vtkmodules.util.numpy_support import numpy_to_vtk
    from vtkmodules.vtkCommonCore import vtkPoints
    from vtkmodules.vtkCommonDataModel import vtkCellArray, vtkPolyData
    from vtkmodules.vtkIOXML import vtkXMLPolyDataWriter

    points, cells = vtkPoints(), vtkCellArray()
    points.SetData(numpy_to_vtk(np.concatenate([line.points for line in lines]), deep=True))
    first = 0
    for line in lines:
        cells.InsertNextCell(len(line.points))
        for k in range(len(line.points)):
            cells.InsertCellPoint(first + k)
        first += len(line.points)
    data = vtkPolyData()
    data.SetPoints(points)
    data.SetLines(cells)
    fields = [f.name for f in Probed.__dataclass_fields__.values()]
    together = Probed(*[np.concatenate([getattr(one, name) for one in probed]) for name in fields])
    _add_values(data, together, title)
    return _written(vtkXMLPolyDataWriter(), data)


def _add_values(data: Any, probed: Probed, title: str) -> None:
    from .surface_file import add_array, add_texts

    values = data.GetPointData()
    add_array(values, "potential", probed.potential, "V")
    add_array(values, "potential_uncertainty", probed.potential_uncertainty, "V")
    add_array(values, "field", probed.field, "V/m")
    add_array(values, "field_uncertainty", probed.field_uncertainty, "V/m")
    add_array(values, "metal", probed.inside.astype(np.int32), "")
    add_texts(data.GetFieldData(), "title", (title,))


def _written(writer: Any, data: Any) -> str:
    writer.SetInputData(data)
    writer.WriteToOutputStringOn()
    writer.SetDataModeToBinary()
    writer.SetCompressorTypeToZLib()
    writer.Write()
    text: str = writer.GetOutputString()
    return text


def write_field(path: str | Path, text: str, extension: str) -> Path:
    """Write a file whole or not at all, under the extension that its content has.

    Parameters
    ----------
    path : str or Path
    text : str
    extension : str
        Such as ".csv".

    Returns
    -------
    Path

    Raises
    ------
    InputError
        If the name has another extension, or the file cannot be written.
    """
    if Path(path).suffix.lower() != extension:
        raise InputError(f"{path}: this is written as {extension}; name it with --out NAME{extension}")
    return write_text(path, text)
