"""What a reader hands back, the registry of formats, and the checks that every format shares."""

import os
import re
import unicodedata
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import unquote

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

from ..facet_tolerance import FacetTolerance
from ..names import check_file_name

__all__ = [
    "MOST_COPIED_TRIANGLES",
    "READERS",
    "RawFile",
    "RawPart",
    "Remark",
    "Source",
    "check_extent",
    "check_part",
    "check_side_file",
    "decimal_comma_line",
    "looks_like_text",
    "normalised_text",
    "read_bytes",
    "register",
    "single_spacing",
    "text_spacing",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Largest relative distance between a number and its nearest single-precision value.
_SINGLE = 2.0**-24


#: Coordinates beyond these, in the unit of the file, are no part: their sixth powers must stay in range.
_FARTHEST, _SMALLEST = 1e15, 1e-15


@dataclass(frozen=True, eq=False)
class RawPart:
    """One solid, object or node of a file, in the unit of the file, nothing merged.

    Attributes
    ----------
    name : str
        As written in the file; empty where the format has none.
    vertices : (nv, 3) float
    triangles : (nt, 3) int
    spacing : float
        Rounding of the coordinates as stored, half a step, in the unit of the file.
    """

    name: str
    vertices: FloatArray
    triangles: IntArray
    spacing: float


@dataclass(frozen=True)
class Remark:
    """Something about a whole file that a reader of the drawing should know: a word for scripts, text, remedy."""

    code: str
    text: str
    remedy: str


@dataclass(frozen=True, eq=False)
class RawFile:
    """All parts of one file, the unit it carries (None where the format has none), what is worth saying, side files."""

    path: Path
    parts: list[RawPart]
    unit: str | None = None
    remarks: tuple[Remark, ...] = ()
    side_files: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Source:
    """What a reader is given: the content of a file, wherever it lay.

    Attributes
    ----------
    path : Path
        What messages call it; ``archive.zip/part.stl`` for a member of an archive.
    data : bytes
    beside : callable
        Content of a file that this one names, by that name; refused outside of the folder or the archive.
    facet_tolerance : FacetTolerance or None
        How closely facets are to follow a curved shape, for formats that hold curved shapes.
    """

    path: Path
    data: bytes
    beside: Callable[[str], bytes]
    facet_tolerance: FacetTolerance | None = None


Reader = Callable[[Source], RawFile]
READERS: dict[str, Reader] = {}

#: A file of a few kilobytes may place one mesh a million times: beyond so many triangles it is refused.
MOST_COPIED_TRIANGLES = 4_000_000

#: Files are read whole; beyond this many bytes the bodies would not fit into the memory of a workstation.
_LARGEST = 4 * 2**30


def register(*extensions: str) -> Callable[[Reader], Reader]:
    """Decorator: this function reads files with these extensions (with the dot, lower case)."""

    def put(reader: Reader) -> Reader:
        for extension in extensions:
            READERS[extension] = reader
        return reader

    return put


def read_bytes(path: Path) -> bytes:
    """Whole content of a file that exists and is not empty.

    Raises
    ------
    InputError
        If it is missing, a folder, empty or not readable.
    """
    check_file_name(path)
    try:
        if path.is_dir():
            raise InputError(f"{path}: is a folder; name the mesh files in it")
        size = os.stat(path).st_size
        if not path.is_file():
            raise InputError(f"{path}: is no regular file; name a mesh file")
        if size == 0:
            raise InputError(f"{path}: the file is empty; export it again")
        if size > _LARGEST:
            raise InputError(f"{path}: has {size / 2**30:.1f} GiB, more than {_LARGEST >> 30}; export it coarser")
        return path.read_bytes()
    except InputError:
        raise
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file; check the name and the folder") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror or error}); mend that") from None


def check_side_file(path: Path, name: str) -> str:
    """Relative path of a file that another one names by a URI reference (RFC 3986).

    Parameters
    ----------
    path : Path
        The file that names it, for messages.
    name : str

    Returns
    -------
    str
        With forward slashes.

    Raises
    ------
    InputError
        If it is no plain relative path that stays in the folder.
    """
    plain = unquote(name)
    steps = plain.split("/")
    odd = "\\" in plain or ":" in plain or any(unicodedata.category(c)[0] == "C" for c in plain)
    if odd or any(step in ("", "..") for step in steps):
        raise InputError(f"{path}: names a file {name[:60]!r}, which is no file in its own folder; export it again")
    return "/".join(step for step in steps if step != ".")


def looks_like_text(data: bytes) -> bool:
    """Whether the first kilobyte holds nothing but text."""
    head = data[:1024]
    return b"\0" not in head and sum(byte < 32 and byte not in (9, 10, 12, 13) for byte in head) == 0


def normalised_text(data: bytes) -> bytes:
    """The same text without byte order mark, with line feeds only."""
    return data.removeprefix(b"\xef\xbb\xbf").replace(b"\r\n", b"\n").replace(b"\r", b"\n")


def decimal_comma_line(text: bytes) -> int | None:
    """Number of the first line that holds a decimal comma, counted from 1, or None."""
    found = re.search(rb"\d,\d", text)
    return None if found is None else text.count(b"\n", 0, found.start()) + 1


def single_spacing(vertices: FloatArray) -> float:
    """Rounding of single-precision coordinates of this size."""
    return _SINGLE * float(np.abs(vertices).max(initial=0.0))


def text_spacing(vertices: FloatArray) -> float:
    """Rounding of coordinates read from text.

    Numbers that all fit into eight decimal digits were most likely single precision before they were
    printed; more digits mean double precision, whose rounding does not matter here.

    Parameters
    ----------
    vertices : (nv, 3) float
    """
    values = vertices[np.abs(vertices) > 1e-290]
    digits = 10.0 ** (7 - np.floor(np.log10(np.abs(values))))
    scaled = values * digits
    if (np.abs(scaled - np.round(scaled)) < 1e-4).all():
        return single_spacing(vertices)
    return 2.0**-29 * single_spacing(vertices)


def check_part(path: Path, part: RawPart, what: str = "part") -> RawPart:
    """Refuse a part that no later step could use.

    Raises
    ------
    InputError
        If it has no triangle, a vertex that is not finite, or an index out of range.
    """
    label = f"{what} {part.name!r}" if part.name else "the mesh"
    if len(part.triangles) == 0:
        raise InputError(f"{path}: {label} holds no triangle; export it again as a surface mesh")
    if part.triangles.min() < 0 or part.triangles.max() >= len(part.vertices):
        outside = (part.triangles < 0) | (part.triangles >= len(part.vertices))
        bad = int(np.flatnonzero(outside.any(axis=1))[0])
        raise InputError(
            f"{path}: {label}, face {bad + 1} names a vertex that does not exist "
            f"(there are {len(part.vertices)}); the file is damaged, export it again"
        )
    finite = np.isfinite(part.vertices).all(axis=1)
    if not finite.all():
        bad = int(np.flatnonzero(~finite)[0])
        face = np.flatnonzero((part.triangles == bad).any(axis=1))
        place = f"face {int(face[0]) + 1}" if len(face) else f"vertex {bad + 1}"
        count = int((~finite).sum())
        many = "1 vertex is" if count == 1 else f"{count} vertices are"
        raise InputError(
            f"{path}: {label}, {place}: {many} not finite (NaN or infinite); mend the part in CAD and export it again"
        )
    return part


def check_extent(path: Path, part: RawPart) -> None:
    """Refuse a part so large or small that areas and volumes would leave the range of numbers.

    Raises
    ------
    InputError
        If a coordinate in use exceeds `_FARTHEST`, or all of them lie within `_SMALLEST`, but not in one point
        (told later).
    """
    label = f"part {part.name!r}" if part.name else "the mesh"
    used = part.vertices
    if not float(np.abs(used).max()) <= _FARTHEST:  # else vertices that no triangle uses do not matter
        used = part.vertices[part.triangles.ravel()]
    farthest = float(np.abs(used).max())
    if not farthest <= _FARTHEST:
        raise InputError(
            f"{path}: {label} has a coordinate of {farthest:.3g}, beyond {_FARTHEST:g}; "
            "the file is damaged, mend the part in CAD and export it again"
        )
    if float(np.ptp(part.vertices[part.triangles[0]], axis=0).max()) >= _SMALLEST:
        return
    if 0.0 < float(np.ptp(part.vertices[part.triangles.ravel()], axis=0).max()) < _SMALLEST:
        raise InputError(f"{path}: {label} is smaller than {_SMALLEST:g} units; export it in a smaller unit")
