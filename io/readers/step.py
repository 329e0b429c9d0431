"""STEP (ISO 10303-21; AP203, AP214, AP242): curved shapes, made into facets by the Open CASCADE kernel.

The kernel comes with the package cascadio, an optional one. It runs in a process of its own: it writes to the terminal
as it likes, and a damaged file may bring it down or keep it busy for ever.
"""

import importlib.util
import re
import subprocess
import sys
import tempfile
from math import hypot
from pathlib import Path

import numpy as np

from daraf.bem.errors import InputError

from ..facet_tolerance import FacetTolerance
from ..mesh_units import METRES_PER_UNIT, metric_unit
from .gltf import glb_chunks, scene_parts
from .raw import RawFile, RawPart, Remark, Source, register
from .step_kernel import NOTHING_MADE
from .step_text import StepUnit, point_span, step_unit

__all__ = ["read_step"]

#: Facets follow a curved shape to this share of the diagonal of the file's box, and neighbours turn by this angle at
#: most: gentle enough that edges between them are known as meant smooth.
_SHARE = 1e-3
_ANGLE = 0.35

#: The first run guesses the size of the file from its points; a tolerance off by more than this is not kept.
_OFF = 2.0

#: Size of a file whose points say nothing, m.
_SIZE = 0.01

#: A kernel that takes longer than these seconds, and so many more for each megabyte, does not come back.
_SECONDS, _SECONDS_PER_MB = 8.0, 100.0

#: Names that the kernel or careless writers invent.
_NO_NAME = re.compile(r"(Open CASCADE STEP translator.*|NAUO\d*|=>\[.*\]|(SOLID|COMPOUND|SHELL|Part|Body)?\d*)", re.I)

_KERNEL = "cascadio"


@register(".step", ".stp")
def read_step(source: Source) -> RawFile:
    """Read a STEP file: facets in the unit of the file, or in mm where it names none."""
    path, data = source.path, source.data
    if b"ISO-10303-21" not in data[:2000]:
        raise InputError(f"{path}: does not start with 'ISO-10303-21', so no STEP file; export it again")
    if b"END-ISO-10303-21" not in data[-2000:]:
        raise InputError(f"{path}: ends before 'END-ISO-10303-21': it is truncated; export it again")
    if importlib.util.find_spec(_KERNEL) is None:
        raise InputError(f"{path}: reading STEP needs one more package: pip install 'daraf[step]'")
    unit = step_unit(path, data)
    wanted = source.facet_tolerance or FacetTolerance(share=_SHARE)
    metres = wanted.metres(point_span(data, unit.own) or _SIZE)
    parts = _facets(path, data, metres)
    size = _diagonal(parts)
    right = wanted.metres(size)
    if not right / _OFF <= metres <= right:
        metres = right
        parts = _facets(path, data, metres)
    scale = 1.0 / unit.metres
    parts = [RawPart(_named(part.name), part.vertices * scale, part.triangles, part.spacing * scale) for part in parts]
    remark = _remark(metres, size, stated=source.facet_tolerance is not None)
    remarks = (remark, *_odd_unit(unit))
    return RawFile(path, parts, unit.name, remarks)


def _diagonal(parts: list[RawPart]) -> float:
    corners = np.concatenate([part.vertices for part in parts])
    return hypot(*np.ptp(corners, axis=0))


def _named(name: str) -> str:
    return "" if _NO_NAME.fullmatch(name.strip()) else name


def _remark(metres: float, size: float, *, stated: bool) -> Remark:
    unit = metric_unit(metres)
    shown = f"{metres / METRES_PER_UNIT[unit]:.3g} {unit}"
    why = "as stated" if stated else "chosen from its size"
    text = (
        f"its curved faces were made into facets within {shown} of the shape ({metres / size:.2g} of its size; {why})"
    )
    return Remark("facet-tolerance", text, "state a facet tolerance if that is too coarse or too fine")


def _odd_unit(unit: StepUnit) -> tuple[Remark, ...]:
    if unit.name is not None and unit.said is None:
        return ()
    if unit.name is None:
        return (Remark("no-unit", "the file names no unit of length", "the unit stated is used"),)
    text = f"the file's own unit is {unit.said}; lengths are given in {unit.name}"
    return (Remark("odd-unit", text, "check the size"),)


def _facets(path: Path, data: bytes, tolerance: float) -> list[RawPart]:
    """Run the kernel: parts in metres, each welded and without the triangles that poles shrink to nothing."""
    if not 0.0 < tolerance < float("inf"):
        raise InputError(f"{path}: its size makes no sense (its points span nothing or too much); export it again")
    glb = _kernel(path, data, tolerance * 1e3)  # the kernel takes millimetres
    document, binary = glb_chunks(path, glb)

    def beside(name: str) -> bytes:
        raise InputError(f"{path}: the kernel handed back no geometry for {name!r}; export it again")

    return [_welded(part) for part in scene_parts(path, document, binary, beside)]


def _welded(part: RawPart) -> RawPart:
    """Equal vertices merged, triangles with two equal corners dropped: those are the kernel's, at poles of spheres."""
    vertices, inverse = np.unique(part.vertices + 0.0, axis=0, return_inverse=True)
    triangles = inverse.ravel()[part.triangles]
    proper = (triangles != np.roll(triangles, -1, axis=1)).all(axis=1)
    # placements are single precision too
    spacing = part.spacing + 2.0**-24 * float(np.abs(vertices).max(initial=0.0))
    return RawPart(part.name, vertices, np.ascontiguousarray(triangles[proper]), spacing)


def _kernel(path: Path, data: bytes, millimetres: float) -> bytes:
    """GLB made by the kernel in a process of its own."""
    megabytes = len(data) / 2**20
    with tempfile.TemporaryDirectory(prefix="daraf-step-") as folder:
        given, made = Path(folder) / "in.step", Path(folder) / "out.glb"
        given.write_bytes(data)
        words = [str(given), str(made), repr(millimetres), repr(_ANGLE), repr(_memory(megabytes))]
        script = Path(__file__).with_name("step_kernel.py")
        try:
            done = subprocess.run(
                [sys.executable, "-P", str(script), *words],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=subprocess.STDOUT,
                timeout=_SECONDS + _SECONDS_PER_MB * megabytes,
                check=False,
            )
        except subprocess.TimeoutExpired:
            raise InputError(
                f"{path}: the kernel does not finish it; state a coarser facet tolerance or export a mesh"
            ) from None
        if done.returncode == 0 and made.exists():
            return made.read_bytes()
    raise InputError(f"{path}: {_complaint(done.returncode, done.stdout)}; export it again")


def _memory(megabytes: float) -> int:
    """Bytes that the kernel may take."""
    return int(2**31 + 400 * megabytes * 2**20)


def _complaint(code: int, said: bytes) -> str:
    text = re.sub(r"\x1b\[[0-9;]*m", "", said.decode("utf-8", "replace"))
    found = re.search(r"ERR StepFile : (.*?)\s*\*{4}", text)
    if found:
        return f"is damaged or no valid STEP file ({' '.join(found[1].split())[:100]})"
    if code == NOTHING_MADE:
        return "holds no solid or surface that could be made into facets"
    return "the kernel could not cope with it (it crashed or ran out of memory)"
