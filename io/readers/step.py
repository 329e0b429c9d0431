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
from ..topology import connected_pieces, edges_of
from .gltf import glb_chunks, scene_parts
from .raw import RawFile, RawPart, Remark, Source, register
from .step_kernel import NOTHING_MADE
from .step_text import StepUnit, count_faces, point_span, step_unit

__all__ = ["read_step"]

#: Facets follow a curved shape to this share of the diagonal of the file's box, and neighbours turn by this angle at
#: most: gentle enough that edges between them are known as meant smooth.
_SHARE = 2e-3
_ANGLE = 0.35
#: The kernel oversteps its tolerance, on spheres up to 1.7 times: it is asked for this share.
_KEPT = 0.5

#: The first run guesses the size of the file from its text, on the low side since round things are counted in full;
#: a tolerance too fine by more than the factor is not kept.
_GUESS, _OFF = 0.7, 2.5

#: Size of a file whose points say nothing, m.
_SIZE = 0.01

#: A kernel that computes longer than these seconds, and so many more for each megabyte, does not come back. On a busy
#: machine that takes so many times longer.
_SECONDS, _SECONDS_PER_MB, _BUSY = 8.0, 100.0, 5.0

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
    metres = wanted.metres(_GUESS * point_span(data, unit.own) or _SIZE)
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
    glb = _kernel(path, data, _KEPT * tolerance * 1e3)  # the kernel takes millimetres
    document, binary = glb_chunks(path, glb)

    def beside(name: str) -> bytes:
        raise InputError(f"{path}: the kernel handed back no geometry for {name!r}; export it again")

    parts = [_welded(part) for part in scene_parts(path, document, binary, beside)]
    n_made = sum(len(mesh.get("primitives", ())) for mesh in document.get("meshes", ()))
    _refuse_losses(path, data, parts, n_made)
    return parts


def _refuse_losses(path: Path, data: bytes, parts: list[RawPart], n_made: int) -> None:
    """Refuse what the kernel left out without a word: faces of solids, or whole solids."""
    n_faces, n_solids = count_faces(data)
    if n_made >= n_faces:
        return
    pieces = sum(connected_pieces(part.triangles)[0] for part in parts)
    gaping = [part.name for part in parts if n_solids and not edges_of(part.triangles).closed]
    if gaping or pieces < n_solids:
        where = f" of {gaping[0]!r}" if gaping and gaping[0] else ""
        raise InputError(
            f"{path}: only {n_made} of {n_faces} faces could be made into facets, and a solid{where} is not closed "
            "without the others; the file is damaged, export it again"
        )


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
    seconds = _SECONDS + _SECONDS_PER_MB * megabytes
    with tempfile.TemporaryDirectory(prefix="daraf-step-") as folder:
        given, made = Path(folder) / "in.step", Path(folder) / "out.glb"
        given.write_bytes(data)
        words = [str(given), str(made), repr(millimetres), repr(_ANGLE), repr(_memory(megabytes)), repr(round(seconds))]
        script = Path(__file__).with_name("step_kernel.py")
        try:
            done = subprocess.run(
                [sys.executable, "-P", str(script), *words],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=subprocess.STDOUT,
                timeout=_BUSY * seconds,
                check=False,
            )
        except subprocess.TimeoutExpired:
            raise InputError(
                f"{path}: the kernel does not finish it; state a coarser facet tolerance or export a mesh"
            ) from None
        if done.returncode == 0 and made.exists() and b"ERR Step" not in done.stdout:
            return made.read_bytes()
    raise InputError(f"{path}: {_complaint(done.returncode, done.stdout)}")


def _memory(megabytes: float) -> int:
    """Bytes that the kernel may take."""
    return int(2**31 + 400 * megabytes * 2**20)


def _complaint(code: int, said: bytes) -> str:
    text = re.sub(r"\x1b\[[0-9;]*m", "", said.decode("utf-8", "replace"))
    found = re.search(r"ERR Step\w* : (.*?)\s*\*{3}", text)
    if found:
        return f"is damaged or no valid STEP file ({' '.join(found[1].split())[:100]}); export it again"
    if code == NOTHING_MADE:
        return "holds no solid or surface that could be made into facets; export it again"
    return (
        "the kernel could not cope with it (it crashed, or ran out of memory or time); "
        "state a coarser facet tolerance, or export a mesh"
    )
