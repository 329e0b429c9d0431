"""3MF (3MF Consortium, Core Specification 1.3): a zip with its unit, named objects, components and build items.

The production extension (models spread over several files of the package) is followed. The XML is read as a stream
of events with entities and document type definitions refused, which the format forbids anyway.
"""

import posixpath
from pathlib import Path
from zipfile import ZipFile

import numpy as np

from daraf.bem.errors import InputError

from ..mesh_units import length_unit
from .archive import allowed_bytes, open_zip, read_member
from .raw import MOST_COPIED_TRIANGLES, FloatArray, RawFile, RawPart, Source, check_part, register, text_spacing
from .threemf_model import Model, Placed, model_of, root_model

__all__ = ["read_3mf"]

#: Copies of objects, counted while components are followed: they may multiply at each level.
_MOST_COPIES = 100_000
_DEEPEST = 64


@register(".3mf")
def read_3mf(source: Source) -> RawFile:
    """Read a 3MF file; the unit is millimetre where the model names none (core specification, 3.4)."""
    path = source.path
    with open_zip(path, source.data) as archive:
        package = _Package(path, archive, [allowed_bytes(len(source.data))])
        root = package.model(package.root)
        parts = _Build(path, package).parts(root)
    if not parts:
        raise InputError(f"{path}: builds no object with a mesh; export it again as a surface mesh")
    return RawFile(path, parts, unit=length_unit(root.unit))


class _Package:
    """Models of a package by their place in it, each read once."""

    def __init__(self, path: Path, archive: ZipFile, budget: list[int]) -> None:
        self.path, self.archive, self.budget = path, archive, budget
        self.models: dict[str, Model] = {}
        names = archive.namelist()
        relations = read_member(path, archive, "_rels/.rels", budget) if "_rels/.rels" in names else b""
        self.root = root_model(path, relations, names)

    def model(self, place: str) -> Model:
        name = posixpath.normpath("/" + place).lstrip("/")
        if name not in self.models:
            self.models[name] = model_of(self.path, name, read_member(self.path, self.archive, name, self.budget))
        return self.models[name]


class _Build:
    """Objects as parts, placed as the build items and components say."""

    def __init__(self, path: Path, package: _Package) -> None:
        self.path, self.package = path, package
        self.copies = self.triangles = 0
        self.used: set[int] = set()
        self.found: list[RawPart] = []

    def parts(self, root: Model) -> list[RawPart]:
        for item in root.items:
            self._place(self.package.root, item, np.eye(4), 0, "")
        return self.found

    def _place(self, here: str, placed: Placed, above: FloatArray, depth: int, name: str) -> None:
        self.copies += 1
        if self.copies > _MOST_COPIES or depth > _DEEPEST:
            raise InputError(f"{self.path}: places its objects too often or within each other; export fewer copies")
        where = placed.path or here
        one = self.package.model(where).objects.get(placed.object)
        if one is None:
            raise InputError(
                f"{self.path}: names object {placed.object[:40]!r}, which it does not hold; export it again"
            )
        matrix = above @ placed.matrix
        name = one.name or name
        if len(one.triangles):
            self._add(name, one.vertices, one.triangles, matrix)
        for component in one.components:
            self._place(where, component, matrix, depth + 1, name)

    def _add(self, name: str, stored: FloatArray, triangles: np.ndarray, matrix: FloatArray) -> None:
        part = check_part(self.path, RawPart(name, stored, triangles, 0.0), "object")
        size = float(np.linalg.det(matrix[:3, :3]))
        if not np.isfinite(matrix).all() or not np.isfinite(size) or size == 0.0:
            raise InputError(f"{self.path}: the placement of object {name!r} is not usable; export it again")
        self.triangles += len(triangles) if id(stored) in self.used else 0
        self.used.add(id(stored))
        if self.triangles > MOST_COPIED_TRIANGLES:
            raise InputError(f"{self.path}: places its objects so often that memory would not do; export fewer copies")
        faces = part.triangles[:, ::-1] if size < 0.0 else part.triangles  # a mirrored copy is turned inside out
        placed = np.ascontiguousarray(stored @ matrix[:3, :3].T + matrix[:3, 3])
        spacing = text_spacing(stored) * float(np.linalg.norm(matrix[:3, :3], 2))
        self.found.append(RawPart(name, placed, np.ascontiguousarray(faces), spacing))
