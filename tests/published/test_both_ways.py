"""Every case of the exact-solution set solved with the dense matrix and with the fast operator: the same numbers."""

import numpy as np
import pytest

from daraf.bem import solve_capacitance
from published.cases import CASES, case_named

ACCURACY = 0.02


@pytest.mark.slow
@pytest.mark.parametrize("name", [case.name for case in CASES])
def test_forced_both_ways_the_values_agree(name):
    case = case_named(name)
    surface = case.surface()
    dense, fast = (
        solve_capacitance(surface, accuracy=ACCURACY, method=method, want=case.want) for method in ("dense", "fast")
    )
    assert (dense.method, fast.method) == ("dense Cholesky", "fast multipole, conjugate gradients")
    off = np.abs(fast.maxwell - dense.maxwell)
    # both intervals hold the true value, whichever meshes the two ways ended with
    assert (off <= np.hypot(dense.maxwell_uncertainty, fast.maxwell_uncertainty)).all()
    if np.array_equal(dense.panels.corners, fast.panels.corners):
        # one mesh: the difference is what the solution left open, and what the estimate's coarse rules make of what
        # they add, good to a few per cent
        stated = fast.budget["solver"] + fast.budget["far field"]
        scale = np.sqrt(np.outer(np.diag(dense.maxwell), np.diag(dense.maxwell)))
        added = np.abs(dense.passes[-1].estimate)
        assert (off <= stated + 0.03 * added + 1e-9 * scale).all()
