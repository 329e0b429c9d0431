"""Scenes of trimesh (named nodes with transforms) as parts, for formats that hold several objects."""

from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np

from daraf.bem.errors import InputError

from .raw import RawPart, check_part, single_spacing, text_spacing

__all__ = ["load_scene", "scene_parts"]


def load_scene(data: bytes, file_type: str) -> Any:
    """Load a scene, nothing merged or repaired."""
    import trimesh

    return trimesh.load_scene(BytesIO(data), file_type=file_type, process=False)


def scene_parts(path: Path, scene: Any, *, single: bool) -> list[RawPart]:
    """One part per node that shows a mesh, placed by the transform of the node.

    Parameters
    ----------
    path : Path
    scene : trimesh.Scene
    single : bool
        Whether coordinates are stored in single precision.

    Returns
    -------
    list of RawPart

    Raises
    ------
    InputError
        If there is no mesh in it or a mesh is unusable.
    """
    import trimesh

    parts = []
    order = {name: k for k, name in enumerate(scene.geometry)}
    for node in sorted(scene.graph.nodes_geometry, key=lambda node: (order[scene.graph[node][1]], str(node))):
        transform, geometry = scene.graph[node]
        mesh = scene.geometry[geometry]
        if not isinstance(mesh, trimesh.Trimesh):
            continue
        stored = np.array(mesh.vertices, dtype=np.float64)
        triangles = np.array(mesh.faces, dtype=np.int64)
        check_part(path, RawPart(str(geometry), stored, triangles, 0.0), "object")
        turn = np.array(transform, dtype=np.float64)
        if not np.isfinite(turn).all() or np.linalg.det(turn[:3, :3]) == 0.0:
            raise InputError(f"{path}: the placement of object {geometry!r} is not usable; export it again")
        if np.linalg.det(turn[:3, :3]) < 0:  # a mirrored instance turns its faces inside out
            triangles = triangles[:, ::-1]
        spacing = single_spacing(stored) if single else text_spacing(stored)
        scale = float(np.linalg.norm(turn[:3, :3], 2))
        name = str(geometry) if str(node).startswith(str(geometry)) or not str(node) else str(node)
        placed = np.ascontiguousarray(stored @ turn[:3, :3].T + turn[:3, 3])
        parts.append(RawPart(name, placed, np.ascontiguousarray(triangles), spacing * scale))
    if not parts:
        raise InputError(f"{path}: holds no surface mesh; export it again as a surface mesh")
    return parts
