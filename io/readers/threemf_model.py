"""One model file of a 3MF package: unit, objects, build items, read as a stream of XML events."""

from array import array
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TypeVar

import numpy as np

from daraf.bem.errors import InputError

from .raw import FloatArray, IntArray

__all__ = ["Model", "Placed", "model_of", "root_model"]

_CORE = "{http://schemas.microsoft.com/3dmanufacturing/core/2015/02}"
_PATH = "{http://schemas.microsoft.com/3dmanufacturing/production/2015/06}path"
_UNITS = ("micron", "millimeter", "centimeter", "inch", "foot", "meter")
#: What only helps a printer is no part of the shape.
_AIDS = ("support", "solidsupport")


@dataclass(frozen=True, eq=False)
class Placed:
    """An object used somewhere: its number, its model file (empty: this one), its placement, (4, 4)."""

    object: str
    path: str
    matrix: FloatArray


@dataclass(eq=False)
class Object:
    """A mesh or a group of components."""

    name: str
    vertices: FloatArray
    triangles: IntArray
    components: list[Placed] = field(default_factory=list)


@dataclass(eq=False)
class Model:
    """What one model file holds."""

    unit: str = "millimeter"
    objects: dict[str, Object] = field(default_factory=dict)
    items: list[Placed] = field(default_factory=list)


def model_of(path: Path, name: str, text: bytes) -> Model:
    """Read one model file.

    Parameters
    ----------
    path : Path
        Of the package.
    name : str
        Of the model in it.
    text : bytes

    Returns
    -------
    Model

    Raises
    ------
    InputError
        If it is no valid model.
    """
    return _parsed(path, name, text, _Collector(path, name)).model


def root_model(path: Path, relations: bytes, names: list[str]) -> str:
    """Place of the model that the package starts with.

    Parameters
    ----------
    path : Path
    relations : bytes
        Content of the package's relations, empty if it has none.
    names : list of str
        Files in the package.

    Returns
    -------
    str
    """
    if relations:
        targets = _parsed(path, "_rels/.rels", relations, _Relations(path, "_rels/.rels")).targets
        if targets:
            return targets[0].lstrip("/")
    models = [name for name in names if name.lower().endswith(".model")]
    if len(models) != 1:
        raise InputError(f"{path}: does not say which model it starts with; export it again")
    return models[0]


class _Events:
    """Receiver of XML events; refuses document types, and with them entities."""

    def __init__(self, path: Path, name: str) -> None:
        self.path, self.name = path, name

    def fail(self, what: str) -> InputError:
        return InputError(f"{self.path}: {self.name[:60]} in it: {what}; the file is damaged, export it again")

    def doctype(self, *_: Any) -> None:
        raise self.fail("defines a document type or entities, which 3MF forbids")

    def close(self) -> None:
        return


_E = TypeVar("_E", bound=_Events)


class _Relations(_Events):
    def __init__(self, path: Path, name: str) -> None:
        super().__init__(path, name)
        self.targets: list[str] = []

    def start(self, tag: str, attributes: Any) -> None:
        if tag.endswith("}Relationship") and attributes.get("Type", "").endswith("/3dmodel"):
            self.targets.append(attributes.get("Target", ""))


class _Collector(_Events):
    """Builds a `Model` from events."""

    def __init__(self, path: Path, name: str) -> None:
        super().__init__(path, name)
        self.model = Model()
        self.depth = 0
        self.inside: list[str] = []
        self._reset()

    def _reset(self) -> None:
        self.vertices, self.triangles = array("d"), array("q")
        self.components: list[Placed] = []
        self.object: tuple[str, str, str] | None = None

    def start(self, tag: str, attributes: Any) -> None:
        local = tag.removeprefix(_CORE) if tag.startswith(_CORE) else ""
        if not self.inside and local != "model":
            raise self.fail("is no 3MF model")
        self.inside.append(local)
        if local == "vertex":
            self._take(self.vertices, float, attributes, ("x", "y", "z"))
        elif local == "triangle":
            self._take(self.triangles, int, attributes, ("v1", "v2", "v3"))
        elif local == "model":
            self.model.unit = attributes.get("unit", "millimeter")
            if self.model.unit not in _UNITS:
                raise self.fail(f"the unit {self.model.unit[:40]!r} is none of {', '.join(_UNITS)}")
        elif local == "object":
            if self.object is not None:
                raise self.fail("an object lies within an object")
            number = attributes.get("id", "")
            if not number or number in self.model.objects:
                raise self.fail(f"object {number[:40]!r} has no number of its own")
            self.object = (number, attributes.get("name", ""), attributes.get("type", "model"))
        elif local == "component":
            self.components.append(self._placed(attributes))
        elif local == "item":
            self.model.items.append(self._placed(attributes))

    def end(self, tag: str) -> None:
        local = self.inside.pop()
        if local != "object" or self.object is None:
            return
        number, name, kind = self.object
        aid = kind in _AIDS
        vertices = np.array(self.vertices, dtype=np.float64).reshape(-1, 3)
        triangles = np.array(() if aid else self.triangles, dtype=np.int64).reshape(-1, 3)
        self.model.objects[number] = Object(name, vertices, triangles, [] if aid else self.components)
        self._reset()

    def _take(self, into: "array[Any]", kind: Any, attributes: Any, keys: tuple[str, str, str]) -> None:
        try:
            into.extend([kind(attributes[key]) for key in keys])
        except (KeyError, ValueError, OverflowError):
            raise self.fail(f"a vertex or triangle lacks a valid {', '.join(keys)}") from None

    def _placed(self, attributes: Any) -> Placed:
        matrix = np.eye(4)
        words = attributes.get("transform", "").split()
        if words:
            try:
                rows = np.array([float(word) for word in words]).reshape(4, 3)  # row vectors, core specification 3.3
            except ValueError:
                raise self.fail("a placement is not twelve numbers") from None
            matrix[:3] = rows.T
        return Placed(attributes.get("objectid", ""), attributes.get(_PATH, ""), matrix)


def _parsed(path: Path, name: str, text: bytes, events: _E) -> _E:
    from lxml import etree

    target: Any = events
    parser = etree.XMLParser(
        target=target, resolve_entities=False, no_network=True, load_dtd=False, huge_tree=False, recover=False
    )
    try:
        etree.fromstring(text, parser)
    except etree.XMLSyntaxError as error:
        reason = " ".join(str(error).split())[:80]
        raise InputError(
            f"{path}: {name[:60]} in it is no valid XML ({reason}); it is damaged, export it again"
        ) from None
    return events
