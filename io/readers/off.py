"""OFF: the Object File Format of Geomview, text form (geomview.org, OFF file format description)."""

from array import array
from pathlib import Path

import numpy as np

from daraf.bem.errors import InputError

from .polygons import polygons_to_triangles
from .raw import (
    FloatArray,
    IntArray,
    RawFile,
    RawPart,
    Source,
    check_part,
    decimal_comma_line,
    looks_like_text,
    normalised_text,
    register,
    text_spacing,
)

__all__ = ["read_off"]


@register(".off")
def read_off(source: Source) -> RawFile:
    """Read a text OFF file; polygons are cut into triangles, colours are skipped."""
    path, text = source.path, normalised_text(source.data)
    if not looks_like_text(source.data) or b"OFF" not in text[:200].split(b"\n", 1)[0] + text[:8]:
        raise InputError(f"{path}: does not start with 'OFF', so no text OFF file; export it again")
    plain = [line.split(b"#", 1)[0] for line in text.split(b"\n")]
    comma = decimal_comma_line(b"\n".join(plain))
    if comma is not None:
        raise InputError(f"{path}: line {comma} has a decimal comma; export with decimal points")
    lines = [line for line in plain if line.strip()]
    head = lines[0].split()[1:] if lines[0].split()[0].endswith(b"OFF") else lines[0].split()
    if not head and len(lines) > 1:
        lines = lines[1:]
        head = lines[0].split()
    n_vertices, n_faces = _counts(path, head)
    if len(lines) < 1 + n_vertices + n_faces:
        raise InputError(
            f"{path}: its header promises {n_vertices} vertices and {n_faces} faces, but only "
            f"{len(lines) - 1} lines follow; it is truncated, export it again"
        )
    vertices = _vertices(path, lines[1 : 1 + n_vertices])
    corners, sizes = _polygons(path, lines[1 + n_vertices : 1 + n_vertices + n_faces])
    triangles = polygons_to_triangles(vertices, corners, sizes)
    part = check_part(path, RawPart("", vertices, triangles, 0.0))
    return RawFile(path, [RawPart("", part.vertices, part.triangles, text_spacing(part.vertices))])


def _counts(path: Path, head: list[bytes]) -> tuple[int, int]:
    try:
        n_vertices, n_faces = int(head[0]), int(head[1])
    except (ValueError, IndexError):
        raise InputError(f"{path}: the counts of vertices and faces are missing; export it again") from None
    if n_vertices < 0 or n_faces < 0:
        raise InputError(f"{path}: the counts of vertices and faces are negative; export it again")
    return n_vertices, n_faces


def _vertices(path: Path, lines: list[bytes]) -> FloatArray:
    numbers = array("d")
    for number, line in enumerate(lines, start=1):
        try:
            x, y, z = line.split()[:3]
            numbers.extend((float(x), float(y), float(z)))
        except ValueError:
            raise InputError(f"{path}: vertex {number} is not three numbers; the file is damaged") from None
    return np.array(numbers, dtype=np.float64).reshape(-1, 3)


def _polygons(path: Path, lines: list[bytes]) -> tuple[IntArray, IntArray]:
    """Corners of all faces, and how many each has."""
    corners, sizes = array("q"), array("q")
    for number, line in enumerate(lines, start=1):
        words = line.split()
        try:
            count = int(words[0])
            one = [int(word) for word in words[1 : 1 + count]] if 3 <= count < len(words) else []
            corners.extend(one)
        except (ValueError, OverflowError):
            one = []
        if not one:
            raise InputError(f"{path}: face {number} is incomplete; the file is truncated or damaged")
        sizes.append(count)
    if not sizes:
        raise InputError(f"{path}: holds no faces, so no surface; export it again as a surface mesh")
    return np.array(corners, dtype=np.int64), np.array(sizes, dtype=np.int64)
