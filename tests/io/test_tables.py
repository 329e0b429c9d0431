"""Tables: aligned, at most 80 columns, one prefix per matrix."""

import numpy as np
import pytest
from sample_solution import boxes_surface, sample_solution

from daraf.bem.network import excite, mutual_capacitance
from daraf.io.case import make_case
from daraf.io.document import result_document
from daraf.io.problem import Problem
from daraf.io.tables import (
    WIDTH,
    budget_line,
    couplings,
    facet_share,
    force_table,
    matrix_table,
    peak_table,
    result_text,
)


def document(n, volts=20e3, **options):
    surface = boxes_surface(n)
    solution = sample_solution(surface, **options)
    conductors = [{"name": name, "surface": "x.stl"} for name in surface.conductor_names]
    case = make_case({"title": "Boxes in a row", "unit": "mm", "conductor": conductors}, folder=".")
    held = np.arange(n) != 1
    values = np.where(np.arange(n) == 0, volts or 0.0, 0.0)
    mutual = mutual_capacitance(solution.maxwell, solution.maxwell_uncertainty)
    state = None
    if volts is not None:
        state = excite(solution.maxwell, solution.maxwell_uncertainty, held, values)
    made = result_document(Problem(case, surface, (), held, values, ()), solution, mutual, state)
    made["solution"]["seconds"]["total"] = 0.5
    return made


@pytest.mark.parametrize("n", [1, 2, 5, 12, 13, 30])
def test_every_line_fits(n):
    lines = result_text(document(n)).splitlines()
    assert max(map(len, lines)) <= WIDTH
    assert not any(line != line.rstrip() for line in lines)


def test_matrix_up_to_twelve_then_list():
    small, large = result_text(document(12)), result_text(document(13))
    assert "Maxwell capacitance matrix, fF" in small
    assert "12 plate 12" in small
    assert "Maxwell capacitance matrix" not in large
    assert "Mutual capacitances, the largest 40 of 78" in large
    assert "all of them stand in result.json" in large


def test_matrix_table_by_hand():
    values = np.array([[12.3456, -0.51234], [-0.51234, 1.5]]) * 1e-12
    spreads = np.array([[0.0123, 0.00099], [0.00099, 0.5]]) * 1e-12
    assert matrix_table("C", ["a", "b"], ["a", "b"], values, spreads) == [
        "C, pF",
        "                    1 a                 2 b",
        "1 a  12.346   ± 0.012    -0.51234 ± 0.00099",
        "2 b  -0.51234 ± 0.00099   1.50    ± 0.50",
    ]


def test_blocks_of_columns_when_it_is_too_wide():
    n = 9
    values = np.full((n, n), 1.23456e-12)
    names = [f"a rather long conductor name {k}" for k in range(n)]
    lines = matrix_table("C", names, names, values, 1e-3 * values)
    assert max(map(len, lines)) <= WIDTH
    assert lines.count("") >= 1
    assert "…" in lines[1]


def test_couplings_sorted_by_size():
    mutual = np.array([[0, 1, 3], [1, 0, 2], [3, 2, 0]]) * 1e-12
    lines = couplings(["a", "b", "c"], mutual, 0.01 * mutual)
    assert [line.split("  ")[0] for line in lines[1:]] == ["1 a - 3 c", "2 b - 3 c", "1 a - 2 b"]


def test_state_accuracy_effort_and_warnings():
    text = result_text(document(3, reached=False, warnings=[("signs", "an off-diagonal entry is positive")]))
    assert "1 plate 1  20 kV" in text
    assert "3 plate 3  0 V" in text
    assert "NOT reached" in text
    assert "36 panels, 1 pass, dense, 0.50 s, peak memory 123 MB" in text
    assert "warning (signs): an off-diagonal entry is positive" in text


def test_budget_is_relative_to_the_scale_of_the_accuracy():
    made = {
        "capacitance": {"maxwell": [[4.0, -1e-6], [-1e-6, 1.0]]},
        "budget": [
            {"cause": "facets", "maxwell": [[0.004, 0.0], [0.0, 0.0]]},
            {"cause": "discretisation", "maxwell": [[0.0, 1e-5], [1e-5, 0.0]]},
        ],
    }
    # Facets: 0.004/4; discretisation: 1e-5 over 1e-3 sqrt(4 * 1), since the entry itself is smaller.
    assert budget_line(made) == "largest relative uncertainty by cause: discretisation 0.5 %, facets 0.1 %"


def test_facets_share_is_told_with_its_entry():
    """In the made-up solution the facets are 0.1 of every uncertainty, so a hundredth of its square."""
    made = document(2)
    line = made["budget"][1]
    assert line["cause"] == "facets"
    assert line["largest_share"] == pytest.approx(0.01)
    assert facet_share(made) == "facets: at most 1 % of an uncertainty squared, at plate 1 - plate 2"
    line["largest_share"], line["largest_share_at"] = 0.374, ["plate 1", "plate 2"]
    assert "at most 37 % of an uncertainty squared, at plate 1 - plate 2" in result_text(made)
    line["largest_share"] = 0.0
    assert facet_share(made) == ""


def test_causes_that_add_nothing_are_not_printed():
    made = document(1)
    made["budget"].append({**made["budget"][0], "cause": "coordinates", "maxwell": [[1e-20]]})
    assert "coordinates" not in budget_line(made)


def test_caution_beyond_extra_low_voltage_only():
    assert "extra-low voltage" in result_text(document(2, volts=51.0))
    assert "extra-low voltage" not in result_text(document(2, volts=49.0))
    nothing = document(2, volts=None)
    assert nothing["charge"] == {"unit": "C", "value": None, "uncertainty": None}
    assert "Potentials" not in result_text(nothing)


def test_keys_of_the_document_in_order():
    wanted = (
        "daraf title case inputs changes conductors capacitance charge potential energy force torque surface_field "
        "budget bodies solution warnings"
    )
    made = document(2)
    assert list(made) == wanted.split()
    assert made["warnings"][-1]["code"] == "not-computed"
    mutual, maxwell = made["capacitance"]["mutual"], made["capacitance"]["maxwell"]
    assert mutual[0][1] == -maxwell[0][1]
    assert mutual[0][0] == pytest.approx(sum(maxwell[0]))


def loaded(n):
    """A document with made-up forces and fields."""
    made = document(n)
    names = made["conductors"]
    made["force"] = {
        "unit": "N",
        "value": [[1.2345e-6, -0.5e-9 * k, -3.0e-6] for k in range(n)],
        "uncertainty": [4.0e-9] * n,
    }
    made["surface_field"] = [
        {
            "conductor": name,
            "peak": 12.3456e3,
            "uncertainty": 150.0 if k == 0 else None,
            "at": [0.001, -123.4e-3, 0.0],
            "bounded": k == 0,
            "exponent": None if k < 2 else 1 / 3,
            "edge_radius_needed": None if k == 0 else "radius of the edge",
        }
        for k, name in enumerate(names)
    ]
    return made


def test_forces_and_peak_fields_by_hand():
    made = loaded(3)
    assert force_table(made) == [
        "Forces as stated, µN; ± holds for the length of the error",
        "                x        y        z       ±",
        "1 plate 1  1.2345   0.0000  -3.0000  0.0040",
        "2 plate 2  1.2345  -0.0005  -3.0000  0.0040",
        "3 plate 3  1.2345  -0.0010  -3.0000  0.0040",
    ]
    assert peak_table(made) == [
        "Peak field on the surface as stated",
        "1 plate 1  12.35 ± 0.15 kV/m at (1, -123.4, 0) mm",
        "2 plate 2  unbounded at (1, -123.4, 0) mm",
        "3 plate 3  unbounded (E ~ r^-0.33) at (1, -123.4, 0) mm",
        "unbounded: at sharp convex edges; result.json names the radius to state",
    ]
    assert max(map(len, result_text(loaded(30)).splitlines())) <= WIDTH


def test_forces_and_fields_that_are_not_there():
    assert force_table(document(2)) == []
    assert peak_table(document(2)) == []
    assert force_table(loaded(1)) == []
    assert "not-computed" not in [one["code"] for one in document(2, volts=None)["warnings"]]
