"""Sensitivities asked for in a case: what `result.json` and the tables say of them."""

import numpy as np
import pytest
from sample_solution import ascii_stl

from daraf.io import load_case, solve_case

CASE = """
unit = "mm"
accuracy = "5 %"
sensitivities = true
[[conductor]]
name = "drive"
surface = "drive.stl"
[[conductor]]
name = "sense"
surface = "sense.stl"
"""


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    folder = tmp_path_factory.mktemp("moved")
    (folder / "drive.stl").write_text(ascii_stl("drive"))
    (folder / "sense.stl").write_text(ascii_stl("sense", shift=(0.0, 0.0, 1.5)))
    (folder / "boxes.toml").write_text(CASE)
    return solve_case(load_case(folder / "boxes.toml"))


def test_two_boxes_pulled_apart_couple_less(made):
    record = made.document["sensitivity"]
    assert record["bodies"] == ["drive", "sense"]
    shift = np.array(record["shift"]["value"])
    # the Maxwell entry between them is negative and rises towards zero
    assert shift[1, 2, 0, 1] > 0
    np.testing.assert_allclose(shift.sum(axis=0), 0.0, atol=1e-9 * np.abs(shift).max())
    assert shift[1, 2, 0, 1] > 3 * record["shift"]["uncertainty"][1][0][1]
    offset, spread = np.array(record["offset"]["value"]), np.array(record["offset"]["uncertainty"])
    # boxes of side L at the distance 1.5 L that grow by d and are shifted apart by 3 d are scaled: 2 C / L per d
    scaled = offset.sum(axis=0) + 3.0 * shift[1, 2]
    total = 2.0 * np.array(made.document["capacitance"]["maxwell"]) / 1e-3
    allowed = spread.sum(axis=0) + 3.0 * np.array(record["shift"]["uncertainty"])[1]
    assert np.all(np.abs(scaled - total) < allowed)
    assert np.all(allowed < 0.3 * np.abs(total))
    assert made.document["solution"]["seconds"]["sensitivities"] > 0


def test_the_tables_show_what_moves_most(made):
    text = made.text()
    assert "Change of Maxwell entries per mm shift and offset" in text
    assert "  drive - sense, fF\n" in text
    assert "    offset  " in text
    assert max(map(len, text.splitlines())) <= 80
