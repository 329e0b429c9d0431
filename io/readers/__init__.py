"""Readers of mesh files: one module per format family, found by the extension of the file."""

from dataclasses import replace
from pathlib import Path

from daraf.bem.errors import InputError

from ..facet_tolerance import FacetTolerance
from . import archive, gltf, obj, off, ply, step, stl, threemf  # noqa: F401  (each registers its extensions)
from .dispatch import read_source
from .raw import READERS, RawFile, RawPart, Remark, Source, check_side_file, read_bytes, register

__all__ = ["READERS", "RawFile", "RawPart", "Remark", "Source", "may_be_curved", "read_file", "read_source", "register"]


def read_file(path: str | Path, facet_tolerance: FacetTolerance | None = None) -> RawFile:
    """Read one mesh file as it is, in its own unit.

    Parameters
    ----------
    path : str or Path
    facet_tolerance : FacetTolerance, optional
        For formats that hold curved shapes (STEP); chosen from the size by default.

    Returns
    -------
    RawFile

    Raises
    ------
    InputError
        If the file is missing, empty, damaged or of an unknown format; one line that names the file.
    """
    path = Path(path)

    named: list[str] = []

    def beside(name: str) -> bytes:
        side = path.parent / check_side_file(path, name)
        named.append(str(side))
        return read_bytes(side)

    try:
        data = read_bytes(path)
    except MemoryError:
        raise InputError(f"{path}: there is not enough memory to read it; export it with fewer triangles") from None
    raw = read_source(Source(path, data, beside, facet_tolerance))
    return replace(raw, side_files=tuple(dict.fromkeys(named)))


def may_be_curved(path: str | Path) -> bool:
    """Whether a file may hold curved shapes, by its extension: STEP, or an archive that may hold it.

    Parameters
    ----------
    path : str or Path
    """
    suffixes = [suffix.lower() for suffix in Path(path).suffixes]
    inner = suffixes[-2:-1] if suffixes[-1:] == [".gz"] else suffixes[-1:]
    return inner[0] in (".step", ".stp", ".zip") if inner else False
