"""PLY, text and binary of both byte orders (Turk, The PLY Polygon File Format, 1994), polygons of any sizes.

Read without a mesh library: those seen take one size for all polygons or drop what is cut off.
"""

import warnings
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

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
    normalised_text,
    register,
    single_spacing,
    text_spacing,
)

__all__ = ["read_ply"]

_TYPES = {
    **dict.fromkeys(("char", "int8"), "i1"),
    **dict.fromkeys(("uchar", "uint8"), "u1"),
    **dict.fromkeys(("short", "int16"), "i2"),
    **dict.fromkeys(("ushort", "uint16"), "u2"),
    **dict.fromkeys(("int", "int32"), "i4"),
    **dict.fromkeys(("uint", "uint32"), "u4"),
    **dict.fromkeys(("float", "float32"), "f4"),
    **dict.fromkeys(("double", "float64"), "f8"),
    "int64": "i8",
    "uint64": "u8",
}
_ORDERS = {"ascii": "", "binary_little_endian": "<", "binary_big_endian": ">"}
_CORNERS = ("vertex_indices", "vertex_index")

#: Longer headers or more properties are no PLY.
_LONGEST_HEADER = 100_000
_MOST_PROPERTIES = 1000


@dataclass(frozen=True)
class _Property:
    """Name, numpy type, and for lists the type of their count."""

    name: str
    kind: str
    count_kind: str = ""


@dataclass(frozen=True)
class _Element:
    name: str
    count: int
    properties: list[_Property] = field(default_factory=list)

    def at(self, *names: str) -> int | None:
        """Place of the first property of one of these names."""
        return next((k for k, one in enumerate(self.properties) if one.name in names), None)


@register(".ply")
def read_ply(source: Source) -> RawFile:
    """Read a PLY file; its header is held against what follows."""
    path = source.path
    form, elements, body, first_line = _header(path, source.data)
    cells = _Cells(path, _ORDERS[form], body, first_line)
    vertices: FloatArray | None = None
    polygons: tuple[IntArray, IntArray] | None = None
    double = form == "ascii"
    for element in elements:
        if element.name == "vertex":
            places = [element.at(axis) for axis in "xyz"]
            if None in places or any(element.properties[k].count_kind for k in places if k is not None):
                raise InputError(f"{path}: its vertices have no x, y, z; export it again as a surface mesh")
            double |= any(element.properties[k].kind == "f8" for k in places if k is not None)
            columns = cells.scalars(element, [k for k in places if k is not None])
            vertices = np.ascontiguousarray(np.column_stack(columns).astype(np.float64))
        elif element.name == "face":
            polygons = _corners(path, cells, element)
        else:
            cells.skip(element)
    if vertices is None or polygons is None or len(vertices) == 0:
        raise InputError(f"{path}: holds no vertices or no faces, so no surface; export it again as a surface mesh")
    triangles = polygons_to_triangles(vertices, *polygons)
    part = check_part(path, RawPart("", vertices, triangles, 0.0))
    spacing = text_spacing(vertices) if double else single_spacing(vertices)
    return RawFile(path, [RawPart("", part.vertices, part.triangles, spacing)])


def _corners(path: Path, cells: "_Cells", element: _Element) -> tuple[IntArray, IntArray]:
    place = element.at(*_CORNERS)
    if place is None or not element.properties[place].count_kind or element.properties[place].kind[0] == "f":
        raise InputError(f"{path}: its faces have no list of vertices; export it again as a surface mesh")
    corners, sizes = cells.lists(element, place)
    if len(sizes) == 0:
        raise InputError(f"{path}: holds no faces, so no surface; export it again as a surface mesh")
    if sizes.min() < 3:
        bad = int(np.flatnonzero(sizes < 3)[0])
        raise InputError(f"{path}: face {bad + 1} has {sizes[bad]} corners; the file is damaged, export it again")
    return corners, sizes


def _header(path: Path, data: bytes) -> tuple[str, list[_Element], bytes, int]:
    """Format, elements, the body behind the header, and the number of its first line."""
    head, found, rest = data[:_LONGEST_HEADER].partition(b"end_header")
    if data[:3] != b"ply" or not found:
        raise InputError(f"{path}: has no PLY header; it is damaged or no PLY file, export it again")
    ending = b"\r\n" if rest[:2] == b"\r\n" else rest[:1]
    if ending not in (b"\r\n", b"\n", b"\r"):
        raise InputError(f"{path}: nothing follows its header; it is truncated, export it again")
    form, elements = "", []
    for line in head.decode("latin-1").replace("\r", "\n").split("\n"):
        words = line.split()
        match words:
            case ["format", kind, _] if kind in _ORDERS:
                form = kind
            case ["element", name, count] if count.isascii() and count.isdigit() and len(count) < 16:
                elements.append(_Element(name, int(count)))
            case ["property", "list", count_kind, kind, name] if elements and {count_kind, kind} <= set(_TYPES):
                elements[-1].properties.append(_Property(name, _TYPES[kind], _TYPES[count_kind]))
            case ["property", kind, name] if elements and kind in _TYPES:
                elements[-1].properties.append(_Property(name, _TYPES[kind]))
            case [] | ["ply"] | ["comment" | "obj_info", *_]:
                pass
            case _:
                raise InputError(f"{path}: its header has a line {line[:60]!r}; the file is damaged, export it again")
    names = [element.name for element in elements]
    if not form or len(set(names)) < len(names) or any(len(one.properties) > _MOST_PROPERTIES for one in elements):
        raise InputError(f"{path}: its header is not complete or not consistent; export it again")
    if any(element.count and not element.properties for element in elements):
        raise InputError(f"{path}: its header names an element without properties; export it again")
    start = len(head) + len(found) + len(ending)
    return form, elements, data[start:], head.count(b"\n") + 2


class _Cells:
    """What follows the header, taken element by element.

    Of a text every word is one cell of eight bytes, so that both forms are walked alike: behind a text all types
    are replaced by double precision, which holds every index exactly.
    """

    def __init__(self, path: Path, order: str, body: bytes, first_line: int) -> None:
        self.path, self.order, self.text = path, order, not order
        self.data = np.frombuffer(body if order else _numbers(path, body, first_line).tobytes(), dtype=np.uint8)
        self.at = 0

    def _kind(self, kind: str) -> np.dtype[np.generic]:
        return np.dtype(np.float64) if self.text else np.dtype(self.order + kind)

    def _take(self, element: _Element, size: int) -> NDArray[np.uint8]:
        """Bytes of a whole element whose entries all have this size."""
        if element.count * size > len(self.data) - self.at:
            raise InputError(
                f"{self.path}: its header promises {element.count} times {element.name!r}, but only "
                f"{(len(self.data) - self.at) // size} follow; it is truncated, export it again"
            )
        start, self.at = self.at, self.at + element.count * size
        return self.data[start : self.at]

    def scalars(self, element: _Element, places: list[int]) -> list[NDArray[np.generic]]:
        """Columns of an element without lists."""
        if any(one.count_kind for one in element.properties):
            raise InputError(f"{self.path}: its {element.name!r} holds lists; export it again as a surface mesh")
        record = np.dtype([(f"c{k}", self._kind(one.kind)) for k, one in enumerate(element.properties)])
        rows = self._take(element, record.itemsize).view(record)
        return [rows[f"c{k}"] for k in places]

    def skip(self, element: _Element) -> None:
        """Pass over an element."""
        if any(one.count_kind for one in element.properties):
            self._walk(element)
        elif element.count:
            self._take(element, sum(self._kind(one.kind).itemsize for one in element.properties))

    def lists(self, element: _Element, place: int) -> tuple[IntArray, IntArray]:
        """Entries of one list property of all rows, one row after the other, and their numbers."""
        found = self._alike(element, place)
        if found is None:
            starts, sizes = self._walk(element, place)
            kind = self._kind(element.properties[place].kind)
            entry = np.repeat(starts - (np.cumsum(sizes) - sizes) * kind.itemsize, sizes)
            offsets = entry + np.arange(int(sizes.sum())) * kind.itemsize
            pieces = self.data[offsets[:, None] + np.arange(kind.itemsize)]
            found = np.ascontiguousarray(pieces).view(kind).ravel(), sizes
        values, sizes = found
        if self.text and not (values == np.floor(values)).all():
            raise InputError(f"{self.path}: a face names a vertex by no whole number; export it again")
        return values.astype(np.int64), sizes

    def _alike(self, element: _Element, place: int) -> tuple[NDArray[np.generic], IntArray] | None:
        """`lists` where all rows have lists of the same lengths, else None."""
        sizes, at = [], self.at
        for one in element.properties:
            n = self._count(one, at) if one.count_kind else 1
            sizes.append(n)
            at += self._kind(one.count_kind).itemsize if one.count_kind else 0
            at += n * self._kind(one.kind).itemsize
        fields: list[Any] = []
        for k, (one, n) in enumerate(zip(element.properties, sizes, strict=True)):
            fields += [(f"n{k}", self._kind(one.count_kind))] if one.count_kind else []
            fields.append((f"c{k}", self._kind(one.kind), (n,)))
        record = np.dtype(fields)
        if element.count == 0 or element.count * record.itemsize > len(self.data) - self.at:
            return None
        rows = self.data[self.at : self.at + element.count * record.itemsize].view(record)
        if any((rows[f"n{k}"] != n).any() for k, n in enumerate(sizes) if element.properties[k].count_kind):
            return None
        self.at += element.count * record.itemsize
        return np.ascontiguousarray(rows[f"c{place}"]).ravel(), np.full(element.count, sizes[place], dtype=np.int64)

    def _count(self, one: _Property, at: int) -> int:
        """Length of a list that starts here."""
        kind = self._kind(one.count_kind)
        cell = self.data[at : at + kind.itemsize]
        number = float(cell.view(kind)[0]) if len(cell) == kind.itemsize else -1.0
        if not 0 <= number <= len(self.data) or number != int(number):
            raise InputError(f"{self.path}: a list in it is cut off or has no valid length; export it again")
        return int(number)

    def _walk(self, element: _Element, place: int = 0) -> tuple[IntArray, IntArray]:
        """Pass row by row; where the list at this place starts in each, and its length."""
        starts, sizes = [], []
        if element.count > len(self.data) - self.at:
            self._take(element, 1)
        for _ in range(element.count):
            for k, one in enumerate(element.properties):
                n = 1
                if one.count_kind:
                    n = self._count(one, self.at)
                    self.at += self._kind(one.count_kind).itemsize
                if k == place:
                    starts.append(self.at)
                    sizes.append(n)
                self.at += n * self._kind(one.kind).itemsize
            if self.at > len(self.data):
                raise InputError(
                    f"{self.path}: its header promises {element.count} times {element.name!r}, but the file ends "
                    f"within number {len(starts)}; it is truncated, export it again"
                )
        return np.array(starts, dtype=np.int64), np.array(sizes, dtype=np.int64)


def _numbers(path: Path, body: bytes, first_line: int) -> FloatArray:
    """All numbers of a text body."""
    text = normalised_text(body)
    comma = decimal_comma_line(text)
    if comma is not None:
        raise InputError(f"{path}: line {first_line + comma - 1} has a decimal comma; export with decimal points")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            return np.fromstring(text, sep=" ", dtype=np.float64)
    except (ValueError, DeprecationWarning):
        pass
    for number, line in enumerate(text.split(b"\n")):
        try:
            [float(word) for word in line.split()]
        except ValueError:
            place = f"line {first_line + number}"
            raise InputError(f"{path}: {place} does not hold numbers only; the file is damaged") from None
    raise InputError(f"{path}: cannot be read as numbers; export it again")
