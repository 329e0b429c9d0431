"""OBJ: vertices, faces, objects and groups (Wavefront, Advanced Visualizer manual, appendix B1).

Materials, normals, curves and texture coordinates carry no geometry of conductors and are skipped.
Objects name the parts; where a file has none, its groups do.
"""

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

__all__ = ["read_obj"]


@register(".obj")
def read_obj(path: Path) -> RawFile:
    """Read an OBJ file; polygons are cut into triangles."""
    data = read_bytes(path)
    if not looks_like_text(data):
        raise InputError(f"{path}: is not text, so no OBJ; export it again")
    lines = normalised_text(data).replace(b"\\\n", b" ").split(b"\n")
    by_object = any(line.lstrip()[:2] == b"o " for line in lines)
    vertices: list[list[float]] = []
    faces: dict[str, list[list[int]]] = {}
    name = ""
    for number, line in enumerate(lines, start=1):
        words = line.split(b"#", 1)[0].split()
        if not words:
            continue
        if words[0] == b"v":
            vertices.append(_vertex(path, number, words))
        elif words[0] == b"f":
            corners = [_index(path, number, word, len(vertices)) for word in words[1:]]
            if len(corners) < 3:
                raise InputError(f"{path}: line {number}: a face needs three vertices; the file is damaged")
            faces.setdefault(name, []).append(corners)
        elif words[0] == (b"o" if by_object else b"g"):
            name = b" ".join(words[1:]).decode("utf-8", "replace")
    return RawFile(path, _parts(path, np.array(vertices, dtype=np.float64).reshape(-1, 3), faces))


def _parts(path: Path, vertices: np.ndarray, faces: dict[str, list[list[int]]]) -> list[RawPart]:
    if not faces:
        raise InputError(f"{path}: holds no face ('f' line), so no surface; export it again as a surface mesh")
    parts = []
    for name, polygons in faces.items():
        triangles = polygons_to_triangles(vertices, polygons)
        if triangles.max() >= len(vertices):
            bad = int(triangles.max())
            raise InputError(f"{path}: a face names vertex {bad + 1}, there are {len(vertices)}; export it again")
        used, inverse = np.unique(triangles, return_inverse=True)
        part = check_part(path, RawPart(name, vertices[used], inverse.reshape(-1, 3), 0.0), "object")
        parts.append(RawPart(name, part.vertices, part.triangles, text_spacing(part.vertices)))
    return parts


def _vertex(path: Path, number: int, words: list[bytes]) -> list[float]:
    try:
        x, y, z = words[1:4]
        return [float(x), float(y), float(z)]
    except ValueError:
        if decimal_comma_line(b" ".join(words)) is not None:
            raise InputError(f"{path}: line {number} has a decimal comma; export with decimal points") from None
        raise InputError(f"{path}: line {number}: a vertex needs three numbers; the file is damaged") from None


def _index(path: Path, number: int, word: bytes, n_vertices: int) -> int:
    """Vertex index from 0; negative ones count back from the last vertex read."""
    try:
        index = int(word.split(b"/", 1)[0])
    except ValueError:
        raise InputError(
            f"{path}: line {number}: {word.decode('latin-1')!r} is no vertex number; the file is damaged"
        ) from None
    index = index - 1 if index > 0 else n_vertices + index if index < 0 else -1
    if index < 0:
        raise InputError(f"{path}: line {number}: a face names a vertex that does not exist; export it again")
    return index
