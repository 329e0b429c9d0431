"""OBJ: vertices, faces, objects and groups (Wavefront, Advanced Visualizer manual, appendix B1).

Materials, normals, curves and texture coordinates carry no geometry of conductors and are skipped.
Objects name the parts; where a file has none, its groups do.
"""

from array import array
from pathlib import Path

import numpy as np

from daraf.bem.errors import InputError

from .polygons import polygons_to_triangles
from .raw import (
    FloatArray,
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

__all__ = ["read_obj"]


@register(".obj")
def read_obj(source: Source) -> RawFile:
    """Read an OBJ file; polygons are cut into triangles."""
    path, data = source.path, source.data
    if not looks_like_text(data):
        raise InputError(f"{path}: is not text, so no OBJ; export it again")
    lines = normalised_text(data).replace(b"\\\n", b" ").split(b"\n")
    by_object = any(line.lstrip()[:2] == b"o " for line in lines)
    vertices = array("d")
    faces: dict[str, tuple[array[int], array[int]]] = {}  # corners and sizes of each part
    name = ""
    for number, line in enumerate(lines, start=1):
        words = line.split(b"#", 1)[0].split()
        if not words:
            continue
        if words[0] == b"v":
            vertices.extend(_vertex(path, number, words))
        elif words[0] == b"f":
            one = [_index(path, number, word, len(vertices) // 3) for word in words[1:]]
            if len(one) < 3:
                raise InputError(f"{path}: line {number}: a face needs three vertices; the file is damaged")
            corners, sizes = faces.setdefault(name, (array("q"), array("q")))
            corners.extend(one)
            sizes.append(len(one))
        elif words[0] == (b"o" if by_object else b"g"):
            name = b" ".join(words[1:]).decode("utf-8", "replace")
    return RawFile(path, _parts(path, np.array(vertices, dtype=np.float64).reshape(-1, 3), faces))


def _parts(path: Path, vertices: FloatArray, faces: "dict[str, tuple[array[int], array[int]]]") -> list[RawPart]:
    if not faces:
        raise InputError(f"{path}: holds no face ('f' line), so no surface; export it again as a surface mesh")
    parts = []
    for name, (corners, sizes) in faces.items():
        used, inverse = np.unique(np.array(corners, dtype=np.int64), return_inverse=True)
        if used[-1] >= len(vertices):
            raise InputError(f"{path}: a face names vertex {used[-1] + 1}, there are {len(vertices)}; export it again")
        own = vertices[used]
        triangles = polygons_to_triangles(own, inverse, np.array(sizes, dtype=np.int64))
        part = check_part(path, RawPart(name, own, triangles, 0.0), "object")
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
    if not 0 <= index < 2**62:
        raise InputError(f"{path}: line {number}: a face names a vertex that does not exist; export it again")
    return index
