"""The demo surfaces in meshes/: remade byte for byte, separate, and as awkward as a CAD export."""

import importlib.util
import itertools
import re
import struct
import tomllib
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parent.parent
MESHES = ROOT / "meshes"


def load_maker() -> ModuleType:
    spec = importlib.util.spec_from_file_location("make_meshes", ROOT / "scripts" / "make_meshes.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def maker() -> ModuleType:
    return load_maker()


@pytest.fixture(scope="module")
def bodies(maker: ModuleType) -> dict[str, NDArray[np.float64]]:
    return {name: maker.corners(mesh) for name, mesh in maker.bodies().items()}


def test_files_are_remade_byte_for_byte(maker: ModuleType, tmp_path: Path) -> None:
    remade = maker.write_all(tmp_path)
    assert {path.name for path in remade} == {path.name for path in MESHES.glob("*.stl")}
    for path in remade:
        assert path.read_bytes() == (MESHES / path.name).read_bytes(), f"{path.name} differs: remake meshes/"


def test_files_are_small() -> None:
    assert sum(path.stat().st_size for path in MESHES.iterdir()) < 400_000


def test_ascii_file_holds_named_solids() -> None:
    text = (MESHES / "probe_head.stl").read_text("ascii")
    assert re.findall(r"^solid (.*)$", text, re.M) == ["sense", "guard-ring", "guard-plate", "screw"]
    assert re.findall(r"^endsolid (.*)$", text, re.M) == re.findall(r"^solid (.*)$", text, re.M)


@pytest.mark.parametrize("name", ["drive.stl", "housing.stl"])
def test_binary_files_state_their_size(name: str) -> None:
    data = (MESHES / name).read_bytes()
    assert not data.startswith(b"solid")
    assert len(data) == 84 + 50 * struct.unpack_from("<I", data, 80)[0]


def test_solids_are_closed_and_the_housing_is_a_sheet(bodies: dict[str, NDArray[np.float64]]) -> None:
    for name, corners in bodies.items():
        edges = [
            (tuple(t[k]), tuple(t[(k + 1) % 3])) for t in corners.tolist() for k in range(3)
        ]  # corners are rounded, so that shared ones are equal
        loose = set(edges) ^ {(b, a) for a, b in edges}
        assert len(set(edges)) == len(edges), f"{name}: an edge is used twice the same way"
        assert bool(loose) == (name == "housing"), name
        volume = np.einsum("ij,ij->", corners[:, 0], np.cross(corners[:, 1], corners[:, 2])) / 6
        assert name == "housing" or volume > 0, f"{name}: normals point inwards"


def test_triangles_are_few_and_some_are_slivers(bodies: dict[str, NDArray[np.float64]]) -> None:
    assert 600 <= sum(len(c) for c in bodies.values()) <= 1500
    corners = np.concatenate(list(bodies.values()))
    longest = np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=2).max(axis=1)
    doubled = np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1)
    aspect = longest**2 / doubled
    assert aspect.max() > 100
    assert np.mean(aspect > 10) > 0.1
    # Single precision of 16 mm is 1e-6 mm: no triangle may collapse in a file.
    assert (doubled / longest).min() > 1e-4


def test_solids_keep_their_distance(maker: ModuleType) -> None:
    for (first, a), (second, b) in itertools.combinations(maker.solids().items(), 2):
        # 0.3 mm is the smallest gap the drawing allows.
        assert a.min_gap(b, 1.0) >= 0.3, f"{first} and {second}"


def test_the_housing_keeps_its_distance(bodies: dict[str, NDArray[np.float64]]) -> None:
    # Every triangle of the sheet lies on the floor z = -7 mm or beyond x = 16 mm; the rest keeps clear.
    sheet = bodies["housing"]
    on_floor, beyond = sheet[..., 2].max(axis=1) == -7.0, sheet[..., 0].min(axis=1) >= 16.0
    assert np.all(on_floor | beyond)
    for name, corners in bodies.items():
        assert name == "housing" or (corners[..., 2].min() >= -4.5 and corners[..., 0].max() <= 13.0), name


def test_case_names_every_body_once(bodies: dict[str, NDArray[np.float64]]) -> None:
    case = tomllib.loads((MESHES / "probe.toml").read_text("utf-8"))
    used: list[str] = []
    for conductor in case["conductor"]:
        body = conductor.get("body", Path(conductor["surface"]).stem)
        used += body if isinstance(body, list) else [body]
        assert (MESHES / conductor["surface"]).is_file()
        assert sum(key in conductor for key in ("potential", "charge", "ground")) == 1
    assert sorted(used) == sorted(bodies)
    assert 3 <= len(case["conductor"]) <= 5
