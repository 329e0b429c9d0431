"""Double surface integrals of 1/r over any two panels: the rule is chosen by their distance.

| pair | rule |
| --- | --- |
| far | product of Gauss rules on both panels |
| middle | closed-form potential of the larger panel at Gauss points of the smaller one |
| close, touching, self | edge integrals of :mod:`daraf.bem.near` |

The limits below keep the relative error of every regime under 1e-6 at worst, 1e-7 in the mean:
``scripts/bench/pair_rules.py``
prints the measured table, ``tests/bem/test_pairs.py`` holds it.
"""

import math

from .frames import POINTS
from .jit import REORDER, kernel
from .near import close_pair_integral
from .pair_rule import pair_rule
from .polygon import polygon_potential

__all__ = ["far_integral", "middle_integral", "pair_integral"]

#: Limits of :func:`daraf.bem.pair_rule.pair_rule`.
_FAR, _MIDDLE = (25.0, 5.0, 2.7), (5.0, 2.7, 1.9)


@kernel(fastmath=REORDER)
def far_integral(source, target, n):
    """Product of n x n Gauss rules on two well separated panels, m3; n is 2, 3 or 4."""
    count = n * n
    s, t = POINTS[n], POINTS[n]
    total = 0.0
    for i in range(count):
        px, py, pz = source[s + i], source[s + count + i], source[s + 2 * count + i]
        part = 0.0
        for j in range(count):
            x, y, z = px - target[t + j], py - target[t + count + j], pz - target[t + 2 * count + j]
            part += target[t + 3 * count + j] / math.sqrt(x * x + y * y + z * z)
        total += source[s + 3 * count + i] * part
    return total


@kernel
def middle_integral(outer, inner, n):
    """Potential of `inner` in closed form at n x n Gauss points of `outer`, m3; n is 2 to 5."""
    s, count = POINTS[n], n * n
    total = 0.0
    for i in range(count):
        potential = polygon_potential(inner, outer[s + i], outer[s + count + i], outer[s + 2 * count + i])
        total += outer[s + 3 * count + i] * potential
    return total


@kernel
def pair_integral(source, target, coarse=False):
    """Integral of 1/r over two different panels, m3, the rule chosen by their distance.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`. The value does not depend on their order.
    coarse : bool
        Whether close and touching pairs take the rule of fewer points of :func:`daraf.bem.near.close_pair_integral`.
    """
    rule, swapped = pair_rule(source, target, _FAR, _MIDDLE)
    # written out, so that the compiler knows how many points there are: about 5 % of an assembly
    if rule == 2:
        return far_integral(source, target, 2)
    if rule == 3:
        return far_integral(source, target, 3)
    if rule == 4:
        return far_integral(source, target, 4)
    outer, inner = (target, source) if swapped else (source, target)
    if rule < 0:
        return middle_integral(outer, inner, -rule)
    return close_pair_integral(outer, inner, coarse)
