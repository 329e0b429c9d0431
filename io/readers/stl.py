"""STL, binary and ASCII with several named solids (StereoLithography Interface Specification, 1989).

Read without a mesh library: those seen drop truncated solids and faces with NaN without a word.
"""

import re
import warnings
from pathlib import Path

import numpy as np

from daraf.bem.errors import InputError

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
    single_spacing,
    text_spacing,
)

__all__ = ["read_stl"]

_HEADER = 84
_RECORD = np.dtype([("normal", "<f4", 3), ("corners", "<f4", (3, 3)), ("attribute", "<u2")])
_SOLID_LINE = re.compile(rb"^[ \t]*(end)?solid\b[ \t]*(.*)$", re.IGNORECASE | re.MULTILINE)
#: Bytes of text taken at once.
_BLOCK = 2**22
_PER_FACET = {b" facet normal ": 1, b" outer loop ": 1, b" vertex ": 3, b" endloop ": 1, b" endfacet ": 1}


@register(".stl")
def read_stl(source: Source) -> RawFile:
    """Read a binary or ASCII STL file; which of the two it is follows from its content alone."""
    path, data = source.path, source.data
    if len(data) >= _HEADER:
        count = int.from_bytes(data[80:84], "little")
        if len(data) == _HEADER + _RECORD.itemsize * count and not _is_ascii(data):
            return RawFile(path, [_binary(path, data, count)])
    if _is_ascii(data):
        return RawFile(path, _ascii(path, normalised_text(data)))
    raise InputError(f"{path}: {_why_not(data)}")


def _is_ascii(data: bytes) -> bool:
    """Whether this is text that starts with ``solid`` (binary headers may start so too)."""
    head = normalised_text(data[:1024]).lstrip().lower()
    # a name may hold control characters; the count of a binary file holds a zero
    return head[:5] == b"solid" and (looks_like_text(data) or (b"\0" not in head and b"facet" in head))


def _why_not(data: bytes) -> str:
    """One clause on what a file is that is no STL."""
    start = data.lstrip()[:15].lower()
    if start.startswith((b"<!doctype", b"<html", b"<?xml")):
        return "is a web page or XML, no STL; download or export the mesh itself"
    if looks_like_text(data):
        return "is text that does not start with 'solid', so no STL; export it again"
    if len(data) < _HEADER:
        return f"has {len(data)} bytes, a binary STL has at least {_HEADER}; export it again"
    count = int.from_bytes(data[80:84], "little")
    need = _HEADER + _RECORD.itemsize * count
    return (
        f"its header promises {count} triangles, which take {need} bytes, but the file has {len(data)}; "
        "it is truncated or no STL, export it again"
    )


def _binary(path: Path, data: bytes, count: int) -> RawPart:
    records = np.frombuffer(data, dtype=_RECORD, count=count, offset=_HEADER)
    return _part(path, "", records["corners"].astype(np.float64), single=True)


def _part(path: Path, name: str, corners: FloatArray, *, single: bool) -> RawPart:
    vertices = np.ascontiguousarray(corners.reshape(-1, 3))
    triangles = np.arange(len(vertices), dtype=np.int64).reshape(-1, 3)
    part = check_part(path, RawPart(name, vertices, triangles, 0.0), "solid")
    spacing = single_spacing(vertices) if single else text_spacing(vertices)
    return RawPart(name, vertices, part.triangles, spacing)


def _ascii(path: Path, text: bytes) -> list[RawPart]:
    """Split the text at its ``solid`` and ``endsolid`` lines and read each solid."""
    parts = []
    opened: re.Match[bytes] | None = None
    end = 0
    for line in _SOLID_LINE.finditer(text):
        if bool(line[1]) == (opened is None):
            number = text.count(b"\n", 0, line.start()) + 1
            missing = "solid" if line[1] else "endsolid"
            raise InputError(f"{path}: line {number}: '{missing}' is missing before it; the file is damaged")
        if opened is None:
            _nothing_outside(path, text, end, line.start())
            opened = line
        else:
            parts.append(_ascii_solid(path, text, opened, line.start()))
            opened, end = None, line.end()
    if opened is not None:
        name = _decode(opened[2])
        raise InputError(
            f"{path}: the file ends inside solid {name!r} ('endsolid' is missing): it is truncated; export it again"
        )
    _nothing_outside(path, text, end, len(text))
    return parts


def _nothing_outside(path: Path, text: bytes, start: int, stop: int) -> None:
    if text[start:stop].strip():
        at = start + len(text[start:stop]) - len(text[start:stop].lstrip())
        number = text.count(b"\n", 0, at) + 1
        raise InputError(f"{path}: line {number}: there is text outside of 'solid ... endsolid'")


def _decode(name: bytes) -> str:
    try:
        return name.decode("utf-8").strip()
    except UnicodeDecodeError:
        return name.decode("latin-1").strip()


def _ascii_solid(path: Path, text: bytes, opened: re.Match[bytes], stop: int) -> RawPart:
    name = _decode(opened[2])
    start = opened.end()
    if not text[start:stop].strip():
        raise InputError(f"{path}: solid {name!r} holds no triangle; remove it or export it again")
    blocks = []
    while start < stop:
        end = _block_end(text, start, stop)
        numbers = _block(text[start:end].lower())
        if numbers is None:
            first_line = text.count(b"\n", 0, start) + 1
            raise InputError(f"{path}: solid {name!r}: {_ascii_fault(text[start:end].lower(), first_line)}")
        blocks.append(numbers)
        start = end
    return _part(path, name, np.concatenate(blocks).reshape(-1, 4, 3)[:, 1:], single=False)


def _block_end(text: bytes, start: int, stop: int) -> int:
    """End of a block of whole facets: words take many times the memory of text, so few are held at once."""
    if stop - start < 2 * _BLOCK:
        return stop
    for word in (b"endfacet", b"ENDFACET"):
        found = text.find(word, start + _BLOCK, start + 2 * _BLOCK)
        if found >= 0:
            return found + len(word)
    return stop


def _block(body: bytes) -> FloatArray | None:
    """Numbers of some facets, twelve each; None if these are no facets."""
    words = b" " + b" ".join(body.split()) + b" "
    n_facets = words.count(b" facet normal ")
    complete = all(words.count(phrase) == times * n_facets for phrase, times in _PER_FACET.items())
    numbers = _numbers(words) if complete else None
    return None if numbers is None or len(numbers) != 12 * n_facets else numbers


def _numbers(words: bytes) -> FloatArray | None:
    """All numbers of a solid: twelve per facet, the normal first. None if something is no number."""
    for phrase in _PER_FACET:
        words = words.replace(phrase, b"  ")  # two blanks: phrases share the blank between them
    if b"(" in words:  # unset normals are printed as "-nan(ind)" and the like; normals are not used
        words = re.sub(rb"nan\([a-z]*\)", b"nan", words)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            return np.fromstring(words, sep=" ", dtype=np.float64)
    except (ValueError, DeprecationWarning):
        return None


def _ascii_fault(body: bytes, first_line: int) -> str:
    """Find the first line that is no STL, to name it."""
    comma = decimal_comma_line(body)
    if comma is not None:
        return f"line {first_line + comma - 1} has a decimal comma; export with decimal points"
    grammar = (
        rb"facet normal",
        rb"outer loop",
        rb"vertex",
        rb"vertex",
        rb"vertex",
        rb"endloop",
        rb"endfacet",
    )
    number = rb"[-+]?(\d+\.?\d*([ed][-+]?\d+)?|\.\d+([ed][-+]?\d+)?|inf(inity)?|nan(\([a-z]*\))?)"
    step = 0
    for k, line in enumerate(body.split(b"\n")):
        words = line.split()
        if not words:
            continue
        wanted = grammar[step % 7].split()
        takes = 3 if wanted[0] in (b"facet", b"vertex") else 0
        fits = words[: len(wanted)] == wanted and len(words) == len(wanted) + takes
        if not fits or not all(re.fullmatch(number, word) for word in words[len(wanted) :]):
            expected = (b" ".join(wanted) + b" x y z" * bool(takes)).decode()
            return f"line {first_line + k}: expected '{expected}'; the file is truncated or damaged"
        step += 1
    if step % 7:
        return "its last facet is not complete: the file is truncated, export it again"
    return "it cannot be read as numbers; export it again"
