"""3MF (3MF Consortium, Core Specification 1.3): a zip with its unit, named objects and build items."""

import zipfile
from io import BytesIO
from pathlib import Path

from daraf.bem.errors import InputError

from ..mesh_units import length_unit
from .raw import RawFile, read_bytes, register
from .scene import load_scene, scene_parts

__all__ = ["read_3mf"]


@register(".3mf")
def read_3mf(path: Path) -> RawFile:
    """Read a 3MF file; the unit is millimetre where the model names none (core specification, 3.4)."""
    data = read_bytes(path)
    if not zipfile.is_zipfile(BytesIO(data)):
        raise InputError(f"{path}: is no zip archive, so no 3MF; it is truncated or damaged, export it again")
    scene = load_scene(data, "3mf")
    unit = scene.units or "millimeter"
    return RawFile(path, scene_parts(path, scene, single=False), unit=length_unit(str(unit)))
