"""GLB, the binary form of glTF 2.0 (ISO/IEC 12113:2022): always metres, named nodes with transforms."""

from pathlib import Path

from daraf.bem.errors import InputError

from .raw import RawFile, read_bytes, register
from .scene import load_scene, scene_parts

__all__ = ["read_glb"]


@register(".glb")
def read_glb(path: Path) -> RawFile:
    """Read a GLB file."""
    data = read_bytes(path)
    if data[:4] != b"glTF" or len(data) < 20:
        raise InputError(f"{path}: does not start with 'glTF', so no GLB; export it again")
    promised = int.from_bytes(data[8:12], "little")
    if promised != len(data):
        raise InputError(
            f"{path}: its header promises {promised} bytes, but the file has {len(data)}; "
            "it is truncated or damaged, export it again"
        )
    return RawFile(path, scene_parts(path, load_scene(data, "glb"), single=True), unit="m")
