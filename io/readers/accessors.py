"""Typed arrays in the buffers of a glTF document (ISO/IEC 12113:2022, 3.6), checked before they are looked at."""

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

from .raw import FloatArray, IntArray

__all__ = ["Accessors"]

_COMPONENTS = {5120: "<i1", 5121: "<u1", 5122: "<i2", 5123: "<u2", 5125: "<u4", 5126: "<f4"}


class Accessors:
    """The accessors of a document by number.

    Parameters
    ----------
    path : Path
        For messages.
    document : dict
    buffers : list of bytes
    """

    def __init__(self, path: Path, document: dict[str, Any], buffers: list[bytes]) -> None:
        self._path, self._document, self._buffers = path, document, buffers

    def points(self, number: Any) -> FloatArray:
        """Positions, (n, 3); whole numbers of quantised meshes as they are, or as shares if normalised."""
        entry, array = self._array(number, "VEC3", 3)
        points = array.astype(np.float64)
        if entry.get("normalized") is True and array.dtype.kind in "iu":
            points = np.maximum(points / np.iinfo(array.dtype).max, -1.0)
        return points

    def indices(self, number: Any) -> IntArray:
        """Vertex numbers, (n,)."""
        _, array = self._array(number, "SCALAR", 1)
        if array.dtype.kind != "u":
            raise InputError(f"{self._path}: the corners of a mesh are no vertex numbers; export it again")
        return array[:, 0].astype(np.int64)

    def _array(self, number: Any, shape: str, n: int) -> tuple[dict[str, Any], NDArray[Any]]:
        entry = self._entry("accessors", number)
        if "sparse" in entry:
            raise InputError(f"{self._path}: uses sparse accessors, which are not read; export it without")
        kind = _COMPONENTS.get(entry.get("componentType", 0))
        if kind is None or entry.get("type") != shape:
            raise InputError(f"{self._path}: accessor {number} has a type that does not fit; export it again")
        view = self._entry("bufferViews", entry.get("bufferView"))
        where = view.get("buffer")
        if type(where) is not int or not 0 <= where < len(self._buffers):
            raise self._damaged("buffer", where)
        buffer = self._buffers[where]
        start, length = self._whole(view, "byteOffset", 0), self._whole(view, "byteLength", -1)
        offset, count = self._whole(entry, "byteOffset", 0), self._whole(entry, "count", -1)
        size = np.dtype(kind).itemsize * n
        stride = self._whole(view, "byteStride", size)
        fits = start + length <= len(buffer) and offset + stride * max(count - 1, 0) + size * bool(count) <= length
        if stride < size or not fits:
            raise InputError(f"{self._path}: accessor {number} reaches beyond its data; the file is damaged")
        array = np.ndarray((count, n), kind, buffer, start + offset, (stride, np.dtype(kind).itemsize))
        return entry, array

    def _entry(self, table: str, number: Any) -> dict[str, Any]:
        entries = self._document.get(table, [])
        if type(number) is not int or not isinstance(entries, list) or not 0 <= number < len(entries):
            raise self._damaged(table, number)
        entry = entries[number]
        if not isinstance(entry, dict):
            raise self._damaged(table, number)
        return entry

    def _whole(self, entry: dict[str, Any], key: str, default: int) -> int:
        value = entry.get(key, default)
        if type(value) is not int or not 0 <= value < 2**48:
            raise InputError(f"{self._path}: {key} is missing or no usable number; the file is damaged")
        return value

    def _damaged(self, table: str, number: Any) -> InputError:
        return InputError(f"{self._path}: {table} has no entry {number!r}; the file is damaged, export it again")
