"""How the capacitances move with the bodies, in the words of `result.json`."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.solution import CapacitanceSolution

from .problem import Problem
from .progress import ProgressCallback

__all__ = ["sensitivity_document"]


def sensitivity_document(
    problem: Problem, solution: CapacitanceSolution, *, progress: ProgressCallback | None = None
) -> dict[str, Any]:
    """Compute the derivatives of the Maxwell matrix per shift, turn and offset of every body.

    Parameters
    ----------
    problem : Problem
    solution : CapacitanceSolution
    progress : callable, optional
        ``progress(stage, done, total, note)``.

    Returns
    -------
    dict
        Offsets of sheets are null: they have none.
    """
    # Here, not above: numba.
    from daraf.bem.creases import find_creases
    from daraf.bem.facets import find_facets, greatest_turn
    from daraf.bem.growth import growth
    from daraf.bem.meaning import body_fill
    from daraf.bem.regions import find_regions
    from daraf.bem.sensitivity import sensitivities

    surface = problem.surface
    regions, _ = find_regions(surface)
    creases = find_creases(surface, regions, greatest_turn=greatest_turn(solution.facets))
    facets = None if solution.facets == "as drawn" else find_facets(surface, regions, creases)
    found = sensitivities(
        solution.panels,
        solution.densities,
        solution.maxwell,
        FOUR_PI_EPSILON_0 * solution.relative_permittivity,
        one_sided=body_fill(surface, creases) != 0,
        previous=solution.previous,
        grown=growth(surface, regions, creases, facets),
        progress=progress,
    )
    return {
        "bodies": list(surface.body_names),
        "shift": {"unit": "F/m", "value": found.shift.tolist(), "uncertainty": found.shift_uncertainty.tolist()},
        "rotation": {
            "unit": "F/rad",
            "value": found.rotation.tolist(),
            "uncertainty": found.rotation_uncertainty.tolist(),
            "about": found.about.tolist(),
        },
        "offset": {
            "unit": "F/m",
            "value": [_known(one) for one in found.offset],
            "uncertainty": [_known(one) for one in found.offset_uncertainty],
        },
    }


def _known(matrix: NDArray[np.float64]) -> list[list[float]] | None:
    return None if np.isnan(matrix).any() else matrix.tolist()
