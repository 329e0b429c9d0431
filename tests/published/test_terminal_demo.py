"""The demo terminal for 30 kV: what a grading ring, and a larger one, does to its peak field."""

from pathlib import Path

import numpy as np
import pytest

from daraf.io import load_case, solve_case

MESHES = Path(__file__).resolve().parents[2] / "meshes"


@pytest.mark.slow
def test_a_larger_ring_lowers_the_peak_and_raises_the_margins():
    found = [
        solve_case(load_case(MESHES / f"{name}.toml"), accuracy=0.05).document
        for name in ("terminal", "terminal_ring", "terminal_large_ring")
    ]
    terminals = [made["surface_field"][0] for made in found]
    assert all(one["bounded"] for one in terminals)
    peak = np.array([one["peak"] for one in terminals])
    spread = np.array([one["uncertainty"] for one in terminals])
    # each step is beyond what both values may be off
    assert np.all(np.diff(peak) < -np.hypot(spread[1:], spread[:-1]))
    assert peak[2] < 0.6 * peak[0]
    margins = [made["strength"]["conductors"][0] for made in found]
    for key in ("streamer", "peek", "withstand", "utilisation"):
        assert np.all(np.diff([one[key]["value"] for one in margins]) > 0), key
    # the small ring's own bar of 6 mm carries the peak, the large one shields the terminal
    assert margins[1]["peek_shape"] == "parallel wires"
    assert margins[1]["radius"] == pytest.approx(6e-3, rel=0.1)
    # nobody utilises more than a uniform field
    assert all(
        one["utilisation"] is None or one["utilisation"]["value"] < 1
        for m in found
        for one in m["strength"]["conductors"]
    )
