"""PLY, text and binary (Turk, The PLY Polygon File Format, 1994): header checked, then read by trimesh."""

from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np

from daraf.bem.errors import InputError

from .polygons import polygons_to_triangles
from .raw import (
    RawFile,
    RawPart,
    check_part,
    decimal_comma_line,
    normalised_text,
    read_bytes,
    register,
    single_spacing,
    text_spacing,
)

__all__ = ["read_ply"]

_BYTES = {
    **dict.fromkeys(("char", "uchar", "int8", "uint8"), 1),
    **dict.fromkeys(("short", "ushort", "int16", "uint16"), 2),
    **dict.fromkeys(("int", "uint", "int32", "uint32", "float", "float32"), 4),
    **dict.fromkeys(("double", "float64", "int64", "uint64"), 8),
}


@register(".ply")
def read_ply(path: Path) -> RawFile:
    """Read a PLY file; its header is held against the size of the file first."""
    data = read_bytes(path)
    elements, text_form, double = _header(path, data)
    import trimesh

    mesh = trimesh.load(BytesIO(data), file_type="ply", process=False)
    if not isinstance(mesh, trimesh.Trimesh):
        raise InputError(f"{path}: holds points but no faces; export it again as a surface mesh")
    vertices = np.array(mesh.vertices, dtype=np.float64)
    triangles = _triangles(mesh, vertices)
    if len(vertices) != elements["vertex"] or len(triangles) < elements["face"]:
        raise InputError(
            f"{path}: its header promises {elements['vertex']} vertices and {elements['face']} faces, but "
            f"{len(vertices)} and {len(triangles)} could be read; the file is damaged, export it again"
        )
    part = check_part(path, RawPart("", vertices, triangles, 0.0))
    spacing = text_spacing(vertices) if text_form or double else single_spacing(vertices)
    return RawFile(path, [RawPart("", part.vertices, part.triangles, spacing)])


def _triangles(mesh: Any, vertices: np.ndarray) -> np.ndarray:
    """Faces of a mesh, cut anew where polygons were: the library makes fans of concave ones too."""
    data = mesh.metadata.get("_ply_raw", {}).get("face", {}).get("data")
    known = (data.dtype.names if isinstance(data, np.ndarray) else data) or ()
    indices = next((data[key] for key in ("vertex_indices", "vertex_index") if key in known), None)
    if indices is not None and indices.dtype.names:  # binary: the count, then the corners
        indices = indices[indices.dtype.names[-1]]
    if indices is None or (np.ndim(indices) == 2 and np.shape(indices)[1] == 3):
        return np.array(mesh.faces, dtype=np.int64)
    return polygons_to_triangles(vertices, [[int(k) for k in corners] for corners in indices if len(corners) >= 3])


def _header(path: Path, data: bytes) -> tuple[dict[str, int], bool, bool]:
    """Element counts, whether the body is text, whether coordinates are double precision."""
    head, found, body = data.partition(b"end_header")
    if data[:3] != b"ply" or not found:
        raise InputError(f"{path}: has no PLY header; it is damaged or no PLY file, export it again")
    lines = [line.split() for line in head.decode("latin-1").replace("\r", "\n").split("\n") if line.split()]
    elements = {words[1]: int(words[2]) for words in lines if words[0] == "element"}
    if elements.get("face", 0) <= 0 or elements.get("vertex", 0) <= 0:
        raise InputError(f"{path}: holds no faces, so no surface; export it again as a surface mesh")
    text_form = any(words[0] == "format" and words[1] == "ascii" for words in lines)
    double = any(words[0] == "property" and words[1] in ("double", "float64") and words[-1] == "x" for words in lines)
    if text_form:
        comma = decimal_comma_line(body)
        if comma is not None:
            number = head.count(b"\n") + comma
            raise InputError(f"{path}: line {number} has a decimal comma; export with decimal points")
        need, have, thing = sum(elements.values()), len(normalised_text(body).split(b"\n")) - 1, "lines"
    else:
        need, have, thing = _least_bytes(lines), len(body), "bytes"
    if have < need:
        raise InputError(
            f"{path}: its header promises at least {need} {thing}, but {have} follow; it is truncated, export it again"
        )
    return elements, text_form, double


def _least_bytes(lines: list[list[str]]) -> int:
    """Least size of a binary body: face lists hold at least three indices, other lists may be empty."""
    total, count, element = 0, 0, ""
    for words in lines:
        if words[0] == "element":
            element, count = words[1], int(words[2])
        elif words[0] == "property" and words[1] == "list":
            indices = 3 if element == "face" and words[-1].startswith("vert") else 0
            total += count * (_BYTES.get(words[2], 1) + indices * _BYTES.get(words[3], 1))
        elif words[0] == "property":
            total += count * _BYTES.get(words[1], 1)
    return total
