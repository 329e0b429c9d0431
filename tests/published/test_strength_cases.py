"""Strength screening through the main job: sphere gaps of the standard, exact utilisation factors."""

import numpy as np
import pytest

from daraf.io import load_case, solve_case
from daraf.io.strength_record import CAUTION
from published import shapes
from published.test_main_job import _binary_stl

CASE = """
title = "Sphere gap"
unit = "mm"
accuracy = "1 %"

[air]
pressure = "101.3 kPa"
temperature = "20 degC"
withstand = "25 kV/cm"

[[conductor]]
name = "live"
surface = "gap.stl"
body = 1
potential = "{voltage} kV"

[[conductor]]
name = "earthed"
surface = "gap.stl"
body = 2
ground = true
"""

#: Diameter and gap in cm, kV peak of IEC 60052:2002 table 2 (from memory; its uncertainty is 3 %), the streamer
#: criterion on the exact field (own quadrature), and the exact utilisation factor with one sphere earthed.
GAPS = [(5.0, 1.0, 32.0, 30.467, None), (10.0, 5.0, 123.0, 117.54, 0.65920444), (25.0, 5.0, 137.0, 134.66, None)]


def gap(folder, diameter, spacing, voltage, levels=3):
    """Diameter and spacing in cm; the file holds millimetres."""
    diameter, spacing = 0.01 * diameter, 0.01 * spacing
    one = shapes.turned(shapes.icosphere(0.5 * diameter, levels), 0.3, (1.0, 0.3, 0.2))
    other = shapes.moved(
        shapes.turned(shapes.icosphere(0.5 * diameter, levels), 0.2, (0.2, 1.0, 0.7)), z=diameter + spacing
    )
    _binary_stl(folder / "gap.stl", one, other)
    (folder / "gap.toml").write_text(CASE.format(voltage=voltage))
    return solve_case(load_case(folder / "gap.toml"))


@pytest.mark.parametrize(("diameter", "spacing", "standard", "criterion", "factor"), GAPS)
def test_sphere_gaps_of_iec_60052_through_the_main_job(diameter, spacing, standard, criterion, factor, tmp_path):
    made = gap(tmp_path, diameter, spacing, 10.0)
    record = made.document["strength"]
    live = next(one for one in record["conductors"] if one["conductor"] == "live")
    assert live["opposite"] == "earthed"
    onset = 10.0 * live["streamer"]["value"]
    spread = 10.0 * live["streamer"]["uncertainty"]
    # the criterion on the exact field, within the uncertainty of the peak
    assert abs(onset - criterion) <= spread + 0.002 * criterion
    assert spread < 0.06 * onset
    # breakdown: 3 % of the standard, and up to 4 % by which onset at small spheres lies below it
    assert -0.07 - spread / onset < onset / standard - 1.0 < 0.03 + spread / onset
    # facets: the gap is measured between the surfaces as moved
    assert live["gap"] == pytest.approx(0.01 * spacing, rel=0.03)
    if factor is not None:
        assert live["utilisation"]["value"] == pytest.approx(factor, rel=0.03)
    # Peek: the sphere's radius is found by its curvature; the facets bend as they are
    assert live["peek_shape"] == "sphere"
    assert live["radius"] == pytest.approx(0.005 * diameter, rel=0.15)
    peak = next(one for one in made.document["surface_field"] if one["conductor"] == "live")["peak"]
    assert live["withstand"]["value"] == pytest.approx(25e5 / peak)
    text = made.text()
    assert "margin to streamer inception" in text
    assert CAUTION in " ".join(text.split())
    assert max(map(len, text.splitlines())) <= 80


def test_thin_air_breaks_down_earlier(tmp_path):
    made = gap(tmp_path, 10.0, 5.0, 10.0, levels=2)
    (tmp_path / "high.toml").write_text((tmp_path / "gap.toml").read_text().replace("101.3 kPa", "70 kPa"))
    thin = solve_case(load_case(tmp_path / "high.toml"))
    one, other = (found.document["strength"]["conductors"][0] for found in (made, thin))
    assert 0.65 < other["streamer"]["value"] / one["streamer"]["value"] < 0.8
    assert other["peek"]["value"] < one["peek"]["value"]
    assert other["withstand"]["value"] == pytest.approx(one["withstand"]["value"])


def test_strength_needs_potentials_and_sharp_edges_are_named(tmp_path):
    from daraf.bem.errors import InputError

    _binary_stl(tmp_path / "gap.stl", shapes.cube(1.0), shapes.moved(shapes.icosphere(0.5, 2), z=2.0))
    (tmp_path / "cube.toml").write_text(CASE.format(voltage=1.0).replace("1 %", "10 %"))
    record = solve_case(load_case(tmp_path / "cube.toml")).document["strength"]
    assert record["not_screened"] == ["live"]
    assert [one["conductor"] for one in record["conductors"]] == ["earthed"]
    text = CASE.format(voltage=1.0).replace('potential = "1.0 kV"', "").replace("ground = true", "")
    (tmp_path / "none.toml").write_text(text)
    with pytest.raises(InputError, match="the strength hangs on potentials"):
        load_case(tmp_path / "none.toml")
    (tmp_path / "hot.toml").write_text(CASE.format(voltage=1.0).replace("20 degC", "20 K"))
    with pytest.raises(InputError, match="temperature 20 is outside"):
        load_case(tmp_path / "hot.toml")


def test_wire_and_sphere_are_told_apart_by_curvature():
    from daraf.bem import solve_capacitance
    from daraf.bem.screening import curvature_radii

    panels = solve_capacitance(shapes.surface([shapes.torus(2.0, 0.25)]), accuracy=0.1).panels
    outer = panels.centroids[np.argmax(np.linalg.norm(panels.centroids[:, :2], axis=1))]
    small, large = curvature_radii(panels, outer, 0)
    # the ring: 0.25 across the wire, 2.25 along it
    assert small == pytest.approx(0.25, rel=0.15)
    assert large == pytest.approx(2.25, rel=0.3)
    flat = solve_capacitance(shapes.surface([shapes.cube(1.0)]), accuracy=0.1).panels
    assert curvature_radii(flat, np.array([0.0, 0.0, 0.5]), 0) == (np.inf, np.inf)
