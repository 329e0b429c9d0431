"""Forces, torques and peak fields in the words of `result.json`."""

import numpy as np
import pytest
from sample_solution import ascii_stl

from daraf.bem import EPSILON_0
from daraf.bem.errors import InputError
from daraf.bem.force import Forces
from daraf.bem.peak import PeakField
from daraf.io import load_case, outcome, read_result, solve_case
from daraf.io.loads import loads_document

CASE = """
title = "Two boxes"
unit = "mm"
accuracy = "10 %"

[[conductor]]
name = "drive"
surface = "drive.stl"
potential = "1 kV"

[[conductor]]
name = "sense"
surface = "sense.stl"
ground = true
"""


@pytest.fixture
def case(tmp_path):
    (tmp_path / "drive.stl").write_text(ascii_stl("drive"))
    (tmp_path / "sense.stl").write_text(ascii_stl("sense", shift=(0.0, 0.0, 1.5)))
    (tmp_path / "boxes.toml").write_text(CASE)
    return load_case(tmp_path / "boxes.toml")


def test_a_solved_case_tells_forces_and_fields(case):
    made = solve_case(case).document
    force, torque = made["force"], made["torque"]
    assert force["unit"] == "N"
    assert torque["unit"] == "N m"
    value = np.array(force["value"])
    # the boxes attract each other along z
    assert value[0, 2] > 0
    np.testing.assert_allclose(value.sum(axis=0), 0.0, atol=1e-12 * abs(value[0, 2]))
    assert abs(value[0, 0]) < force["uncertainty"][0] < 0.5 * value[0, 2]
    np.testing.assert_allclose(torque["about"], [[0.5e-3, 0.5e-3, 0.5e-3], [0.5e-3, 0.5e-3, 2.0e-3]], atol=1e-9)
    one = made["surface_field"][0]
    assert one["conductor"] == "drive"
    assert not one["bounded"]
    assert one["uncertainty"] is None
    assert one["exponent"] == pytest.approx(1 / 3)
    assert one["edge_radius_needed"].startswith("radius of the edge or tip at (")
    assert "mm; the peak then falls as radius^-0.33" in one["edge_radius_needed"]
    # at a right-angled edge E = K r^(-1/3), of the order of the mean field at a tenth of the gap
    edge = one["edge"]
    assert edge["exponent"] == pytest.approx(1 / 3)
    assert 0.3 * 2e6 < edge["intensity"] * (0.05e-3) ** (-1 / 3) < 3 * 2e6
    assert 0 < edge["uncertainty"] < edge["intensity"]
    assert edge["radius"] is None
    # 1 kV over a gap of 0.5 mm
    assert 2e6 < one["peak"] < 2e7
    assert "not-computed" not in [told["code"] for told in made["warnings"]]
    assert {"forces", "peak fields"} <= set(made["solution"]["seconds"])


def test_the_field_on_both_sides_is_kept_with_the_panels(case, tmp_path):
    made = solve_case(case)
    surface = read_result(made.write(tmp_path / "boxes.daraf")).surface
    front, back = surface.field_sides
    # solid boxes: the field is sigma / eps outside and nothing within
    np.testing.assert_allclose(front, np.abs(surface.density) / EPSILON_0, rtol=0.1)
    assert not back.any()


def test_too_many_panels_leave_the_capacitances(case, tmp_path, monkeypatch):
    monkeypatch.setattr("daraf.io.loads.MOST_PANELS", 10)
    made = solve_case(case)
    assert made.document["force"] is None
    assert "too-many-panels" in [one["code"] for one in made.document["warnings"]]
    assert read_result(made.write(tmp_path / "boxes.daraf")).surface.field_sides is None


def test_a_stated_edge_radius_bounds_the_peak(case, tmp_path):
    text = CASE.replace('potential = "1 kV"', 'potential = "1 kV"\nedge_radius = "0.02 mm"')
    (tmp_path / "round.toml").write_text(text)
    found = solve_case(load_case(tmp_path / "round.toml"))
    drive, sense = found.document["surface_field"]
    assert drive["bounded"]
    assert drive["edge_radius_needed"] is None
    # the exact factor of a rounded right angle, daraf.bem.rounded_wedge
    assert drive["peak"] == pytest.approx(1.7460943 * drive["edge"]["intensity"] * (0.02e-3) ** (-1 / 3), rel=1e-6)
    assert 0 < drive["uncertainty"] < drive["peak"]
    assert not sense["bounded"]
    assert "(edges rounded by 20 µm)" in " ".join(found.text().split())
    (tmp_path / "bad.toml").write_text(text.replace("0.02 mm", "0 mm"))
    with pytest.raises(InputError, match="edge_radius must be positive"):
        load_case(tmp_path / "bad.toml")


def test_interrupted_forces_leave_the_capacitances(case, monkeypatch):
    def interrupted(*args, **options):
        raise KeyboardInterrupt

    monkeypatch.setattr(outcome, "loads", interrupted)
    found = solve_case(case)
    assert found.solution.interrupted
    assert found.document["force"] is None
    assert found.document["capacitance"]["maxwell"][0][0] > 0
    assert found.document["warnings"][-1]["text"] == "not computed: forces, torques, peak surface fields"


def test_words_for_smooth_and_sharp():
    forces = Forces(np.ones((2, 3)), np.ones(2), np.ones((2, 3)), np.ones(2), np.zeros((2, 3)))
    place = np.array([0.0254, 0.0, -0.0])
    peaks = [
        PeakField(0, 5.0, 0.1, place, True, None, None),
        PeakField(1, 7.0, None, place, False, None, place),
    ]
    made = loads_document(forces, peaks, ["a", "b"], "in")
    smooth, sharp = made["surface_field"]
    assert smooth["edge_radius_needed"] is None
    assert smooth["uncertainty"] == 0.1
    assert sharp["edge_radius_needed"].startswith("radius of the edge or tip at (1, 0, 0) in; until then")
    assert made["torque"]["about"] == [[0.0] * 3] * 2
