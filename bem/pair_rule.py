"""Which rule a pair of panels is integrated by, from how far apart they are.

The integrals of the potential (:mod:`daraf.bem.pairs`) and of the force (:mod:`daraf.bem.pair_force`) choose alike,
with limits of their own.
"""

import math

from .frames import CENTROID, RADIUS
from .jit import kernel
from .polygon import polygon_distance

__all__ = ["pair_rule"]


@kernel(forceinline=True)
def pair_rule(source, target, far, middle):
    """Rule for two different panels.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`.
    far : tuple of 3 float, falling
        Centre distance over the sum of the radii, beyond which 2 x 2, 3 x 3, 4 x 4 points on both panels do.
    middle : tuple of 3 float, falling
        Distance from the smaller panel's centroid to the larger panel over the smaller one's radius, beyond which
        3 x 3, 4 x 4, 5 x 5 points on the smaller panel do.

    Returns
    -------
    rule : int
        n > 0: n x n points on both; -n < 0: n x n points on the smaller one; 0: close.
    swapped : bool
        The target is the smaller panel. Only told where the rule is not positive.
    """
    x = source[CENTROID] - target[CENTROID]
    y = source[CENTROID + 1] - target[CENTROID + 1]
    z = source[CENTROID + 2] - target[CENTROID + 2]
    ratio = math.sqrt(x * x + y * y + z * z) / (source[RADIUS] + target[RADIUS])
    if ratio > far[0]:
        return 2, False
    if ratio > far[1]:
        return 3, False
    if ratio > far[2]:
        return 4, False
    swapped = source[RADIUS] > target[RADIUS]
    outer, inner = (target, source) if swapped else (source, target)
    ratio = polygon_distance(inner, outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2]) / outer[RADIUS]
    if ratio > middle[0]:
        return -3, swapped
    if ratio > middle[1]:
        return -4, swapped
    if ratio > middle[2]:
        return -5, swapped
    return 0, swapped
