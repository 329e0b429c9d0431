"""glTF 2.0 (ISO/IEC 12113:2022): .glb and .gltf, always metres, named nodes with transforms.

Only the geometry of triangles is read; materials, cameras, skins and animations say nothing about conductors.
"""

import base64
import binascii
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from daraf.bem.errors import InputError

from .accessors import Accessors
from .raw import (
    MOST_COPIED_TRIANGLES,
    FloatArray,
    IntArray,
    RawFile,
    RawPart,
    Source,
    check_part,
    register,
    single_spacing,
)

__all__ = ["glb_chunks", "read_glb", "read_gltf", "scene_parts"]

#: Extensions without which the geometry cannot be read.
_PACKED = ("KHR_draco_mesh_compression", "EXT_meshopt_compression", "KHR_meshopt_compression")
_TRIANGLES, _STRIP, _FAN = 4, 5, 6


@register(".glb")
def read_glb(source: Source) -> RawFile:
    """Read the binary form."""
    document, binary = glb_chunks(source.path, source.data)
    return RawFile(source.path, scene_parts(source.path, document, binary, source.beside), unit="m")


@register(".gltf")
def read_gltf(source: Source) -> RawFile:
    """Read the text form; its buffers are data URIs or files in its folder."""
    document = _document(source.path, source.data)
    return RawFile(source.path, scene_parts(source.path, document, None, source.beside), unit="m")


def glb_chunks(path: Path, data: bytes) -> tuple[dict[str, Any], bytes | None]:
    """The JSON document and the binary chunk of a GLB file.

    Parameters
    ----------
    path : Path
    data : bytes

    Returns
    -------
    document : dict
    binary : bytes or None

    Raises
    ------
    InputError
        If it is none, or its sizes contradict each other.
    """
    if data[:4] != b"glTF" or len(data) < 20:
        raise InputError(f"{path}: does not start with 'glTF', so no GLB; export it again")
    promised = int.from_bytes(data[8:12], "little")
    if promised != len(data):
        raise InputError(
            f"{path}: its header promises {promised} bytes, but the file has {len(data)}; "
            "it is truncated or damaged, export it again"
        )
    chunks: dict[bytes, bytes] = {}
    at = 12
    while at + 8 <= len(data):
        size, kind = int.from_bytes(data[at : at + 4], "little"), data[at + 4 : at + 8]
        if at + 8 + size > len(data):
            raise InputError(f"{path}: a chunk of it is longer than the file; it is damaged, export it again")
        chunks.setdefault(kind, data[at + 8 : at + 8 + size])
        at += 8 + size
    return _document(path, chunks.get(b"JSON", b"")), chunks.get(b"BIN\0")


def _document(path: Path, text: bytes) -> dict[str, Any]:
    try:
        document = json.loads(text)
    except (ValueError, RecursionError):
        raise InputError(f"{path}: its description is no valid JSON; it is damaged, export it again") from None
    if not isinstance(document, dict) or not isinstance(document.get("asset"), dict):
        raise InputError(f"{path}: is no glTF ('asset' is missing); export it again")
    if not str(document["asset"].get("version", "")).startswith("2."):
        raise InputError(f"{path}: is not of version 2 of glTF; export it as glTF 2.0")
    packed = [name for name in _objects(document, "extensionsRequired", str) if name in _PACKED]
    if packed:
        raise InputError(f"{path}: its meshes are compressed ({packed[0]}); export it without compression")
    return document


def scene_parts(
    path: Path, document: dict[str, Any], binary: bytes | None, beside: Callable[[str], bytes]
) -> list[RawPart]:
    """One part per node that shows a mesh of triangles, placed by its own and its parents' transforms.

    Parameters
    ----------
    path : Path
    document : dict
    binary : bytes or None
        What the first buffer holds if it names no file.
    beside : callable
        Content of a file by name.

    Returns
    -------
    list of RawPart

    Raises
    ------
    InputError
        If there is no such mesh, or the document is not consistent.
    """
    buffers = [_buffer(path, k, entry, binary, beside) for k, entry in enumerate(_objects(document, "buffers", dict))]
    accessors = Accessors(path, document, buffers)
    meshes: dict[int, tuple[FloatArray, IntArray] | None] = {}
    entries = _objects(document, "meshes", dict)
    parts = []
    most = MOST_COPIED_TRIANGLES + sum(len(buffer) for buffer in buffers) // 6
    for node, place in _placed_nodes(path, document):
        number = node.get("mesh")
        if number is None:
            continue
        if not isinstance(number, int) or not 0 <= number < len(entries):
            raise InputError(f"{path}: a node shows mesh {number!r}, which does not exist; export it again")
        if number not in meshes:
            meshes[number] = _mesh(path, accessors, entries[number])
        mesh = meshes[number]
        if mesh is None:
            continue
        parts.append(_part(path, _name(node, entries[number]), *mesh, place))
        most -= len(mesh[1])
        if most < 0:
            raise InputError(f"{path}: places its meshes so often that memory would not do; export fewer copies")
    if not parts:
        raise InputError(f"{path}: holds no surface mesh; export it again as a surface mesh")
    return parts


def _objects(document: dict[str, Any], key: str, kind: type) -> list[Any]:
    """A list of the document whose entries are all of one type."""
    found = document.get(key, [])
    if not isinstance(found, list) or not all(isinstance(one, kind) for one in found):
        raise InputError(f"{key!r} is no list of {'tables' if kind is dict else 'words'}")
    return found


def _name(node: dict[str, Any], mesh: dict[str, Any]) -> str:
    return next((one for one in (node.get("name"), mesh.get("name")) if isinstance(one, str) and one.strip()), "")


def _buffer(
    path: Path, number: int, entry: dict[str, Any], binary: bytes | None, beside: Callable[[str], bytes]
) -> bytes:
    uri, size = entry.get("uri"), entry.get("byteLength")
    if uri is None and number == 0 and binary is not None:
        data = binary
    elif isinstance(uri, str) and uri.startswith("data:"):
        _, comma, text = uri.partition(";base64,")
        try:
            data = base64.b64decode(text, validate=True) if comma else b""
        except (binascii.Error, ValueError):
            data = b""
    elif isinstance(uri, str):
        data = beside(uri)
    else:
        raise InputError(f"{path}: the content of buffer {number + 1} is missing; export it again")
    if not isinstance(size, int) or not 0 <= size <= len(data):
        raise InputError(f"{path}: buffer {number + 1} is shorter than promised; it is truncated, export it again")
    return data[:size]


def _placed_nodes(path: Path, document: dict[str, Any]) -> list[tuple[dict[str, Any], FloatArray]]:
    """Nodes of the scene in the order of the file's tree, each with its placement, (4, 4)."""
    nodes = _objects(document, "nodes", dict)
    scenes = _objects(document, "scenes", dict)
    children = [_objects(node, "children", int) for node in nodes]
    if scenes:
        chosen = document.get("scene", 0)
        if not isinstance(chosen, int) or not 0 <= chosen < len(scenes):
            raise InputError(f"{path}: its scene does not exist; export it again")
        roots = _objects(scenes[chosen], "nodes", int)
    else:
        below = {child for one in children for child in one}
        roots = [k for k in range(len(nodes)) if k not in below]
    result = []
    seen: set[int] = set()
    waiting = [(root, np.eye(4)) for root in reversed(roots)]
    while waiting:
        k, above = waiting.pop()
        if not 0 <= k < len(nodes) or k in seen:
            raise InputError(f"{path}: its tree of nodes is not consistent (node {k}); export it again")
        seen.add(k)
        place = above @ _transform(path, nodes[k])
        result.append((nodes[k], place))
        waiting.extend((child, place) for child in reversed(children[k]))
    return result


def _transform(path: Path, node: dict[str, Any]) -> FloatArray:
    """Local transform of a node: a matrix, or scale, rotation (a quaternion) and translation."""
    if "matrix" in node:
        matrix = _floats(path, node, "matrix", 16, None).reshape(4, 4).T
        if not np.allclose(matrix[3], (0.0, 0.0, 0.0, 1.0)):
            raise InputError(f"{path}: a placement in it is no motion or scaling; export it again")
        return matrix
    x, y, z, w = _floats(path, node, "rotation", 4, (0.0, 0.0, 0.0, 1.0))
    length = float(np.sqrt(x * x + y * y + z * z + w * w))
    if not 0.5 < length < 2.0:
        raise InputError(f"{path}: a rotation in it is no unit quaternion; export it again")
    x, y, z, w = (value / length for value in (x, y, z, w))
    turn = np.array(
        [
            [1 - 2 * (y * y + z * z), 2 * (x * y - z * w), 2 * (x * z + y * w)],
            [2 * (x * y + z * w), 1 - 2 * (x * x + z * z), 2 * (y * z - x * w)],
            [2 * (x * z - y * w), 2 * (y * z + x * w), 1 - 2 * (x * x + y * y)],
        ]
    )
    result = np.eye(4)
    result[:3, :3] = turn * _floats(path, node, "scale", 3, (1.0, 1.0, 1.0))
    result[:3, 3] = _floats(path, node, "translation", 3, (0.0, 0.0, 0.0))
    return result


def _floats(path: Path, node: dict[str, Any], key: str, n: int, default: tuple[float, ...] | None) -> FloatArray:
    values = node.get(key, default)
    if not isinstance(values, list | tuple) or len(values) != n or not all(type(v) in (int, float) for v in values):
        raise InputError(f"{path}: the {key} of a node is not {n} numbers; export it again")
    array = np.array(values, dtype=np.float64)
    if not np.isfinite(array).all():
        raise InputError(f"{path}: the {key} of a node is not finite; export it again")
    return array


def _mesh(path: Path, accessors: Accessors, entry: dict[str, Any]) -> tuple[FloatArray, IntArray] | None:
    """Vertices and triangles of all primitives of a mesh; None if it holds points or lines only."""
    vertices: list[FloatArray] = []
    triangles: list[IntArray] = []
    start = 0
    for primitive in _objects(entry, "primitives", dict):
        mode = primitive.get("mode", _TRIANGLES)
        attributes = primitive.get("attributes")
        if mode not in (_TRIANGLES, _STRIP, _FAN) or not isinstance(attributes, dict) or "POSITION" not in attributes:
            continue
        points = accessors.points(attributes["POSITION"])
        indices = accessors.indices(primitive["indices"]) if "indices" in primitive else np.arange(len(points))
        if len(indices) and indices.max() >= len(points):
            raise InputError(
                f"{path}: a face names vertex {indices.max() + 1}, there are {len(points)}; export it again"
            )
        vertices.append(points)
        triangles.append(_triangles(path, mode, indices) + start)
        start += len(points)
    if not vertices:
        return None
    return np.concatenate(vertices), np.concatenate(triangles)


def _triangles(path: Path, mode: int, indices: IntArray) -> IntArray:
    if mode == _TRIANGLES:
        if len(indices) % 3:
            raise InputError(f"{path}: the corners of its triangles are no multiple of three; export it again")
        return indices.reshape(-1, 3)
    if len(indices) < 3:
        raise InputError(f"{path}: a strip of triangles has less than three corners; export it again")
    if mode == _FAN:
        return np.column_stack([np.full(len(indices) - 2, indices[0]), indices[1:-1], indices[2:]])
    strip = np.column_stack([indices[:-2], indices[1:-1], indices[2:]])
    strip[1::2] = strip[1::2, [1, 0, 2]]
    result: IntArray = strip
    return result


def _part(path: Path, name: str, stored: FloatArray, triangles: IntArray, place: FloatArray) -> RawPart:
    check_part(path, RawPart(name, stored, triangles, 0.0), "object")
    size = float(np.linalg.det(place[:3, :3]))
    if not np.isfinite(place).all() or not np.isfinite(size) or size == 0.0:
        raise InputError(f"{path}: the placement of object {name!r} is not usable; export it again")
    if size < 0.0:  # a mirrored copy turns its faces inside out
        triangles = triangles[:, ::-1]
    scale = float(np.linalg.norm(place[:3, :3], 2))
    placed = np.ascontiguousarray(stored @ place[:3, :3].T + place[:3, 3])
    return RawPart(name, placed, np.ascontiguousarray(triangles), single_spacing(stored) * scale)
