"""OFF: the Object File Format of Geomview, text form (geomview.org, OFF file format description)."""

from pathlib import Path

import numpy as np

from daraf.bem.errors import InputError

from .polygons import polygons_to_triangles
from .raw import (
    RawFile,
    RawPart,
    check_part,
    decimal_comma_line,
    looks_like_text,
    normalised_text,
    read_bytes,
    register,
    text_spacing,
)

__all__ = ["read_off"]


@register(".off")
def read_off(path: Path) -> RawFile:
    """Read a text OFF file; polygons are cut into triangles, colours are skipped."""
    data = read_bytes(path)
    text = normalised_text(data)
    if not looks_like_text(data) or b"OFF" not in text[:200].split(b"\n", 1)[0] + text[:8]:
        raise InputError(f"{path}: does not start with 'OFF', so no text OFF file; export it again")
    plain = [line.split(b"#", 1)[0] for line in text.split(b"\n")]
    comma = decimal_comma_line(b"\n".join(plain))
    if comma is not None:
        raise InputError(f"{path}: line {comma} has a decimal comma; export with decimal points")
    lines = [line.split() for line in plain if line.strip()]
    head = lines[0][1:] if lines[0][0].endswith(b"OFF") else lines[0]
    if not head and len(lines) > 1:
        lines = lines[1:]
        head = lines[0]
    n_vertices, n_faces = _counts(path, head)
    if len(lines) < 1 + n_vertices + n_faces:
        raise InputError(
            f"{path}: its header promises {n_vertices} vertices and {n_faces} faces, but only "
            f"{len(lines) - 1} lines follow; it is truncated, export it again"
        )
    vertices = _vertices(path, lines[1 : 1 + n_vertices])
    polygons = _polygons(path, lines[1 + n_vertices : 1 + n_vertices + n_faces])
    triangles = polygons_to_triangles(vertices, polygons)
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


def _vertices(path: Path, lines: list[list[bytes]]) -> np.ndarray:
    try:
        return np.array([[float(w) for w in words[:3]] for words in lines], dtype=np.float64).reshape(-1, 3)
    except ValueError:
        raise InputError(f"{path}: a vertex is not three numbers; the file is damaged") from None


def _polygons(path: Path, lines: list[list[bytes]]) -> list[list[int]]:
    polygons: list[list[int]] = []
    for number, words in enumerate(lines, start=1):
        try:
            count = int(words[0])
            corners = [int(word) for word in words[1 : 1 + count]]
        except ValueError:
            corners, count = [], 0
        if count < 3 or len(corners) != count:
            raise InputError(f"{path}: face {number} is incomplete; the file is truncated or damaged")
        polygons.append(corners)
    return polygons
