"""Gaps between conductors: how narrow they are beside the bodies, and what it takes to resolve them."""

from collections.abc import Sequence
from math import ceil, log2

import numpy as np

from daraf.bem.solution import Notice

from .bodies import Body
from .changes import length_text, place_text
from .contacts import shapes_of
from .gaps import Approach, box_gap, closest_approach

__all__ = ["Narrowest", "narrow_notices", "narrowest_gaps"]

#: Panels start at about this share of their body; see `daraf.bem.start`.
_START = 0.35
#: A gap is worth a word if the panels beside it must be halved at least so often.
_HALVINGS = 7

Narrowest = tuple[float, int, Approach | None]


def narrowest_gaps(bodies: Sequence[Body], owner: Sequence[int]) -> list[Narrowest]:
    """For each body the gap to the nearest body of another conductor.

    Parameters
    ----------
    bodies : sequence of Body
    owner : sequence of int
        Conductor of each.

    Returns
    -------
    list of (distance in m, number of the other body, Approach or None)
        Infinite, -1 and None where there is no other conductor.
    """
    shapes = shapes_of(bodies)
    bounds = np.array([[box_gap(a, b) for b in shapes] for a in shapes])
    found: list[Narrowest] = []
    known: dict[tuple[int, int], Approach] = {}
    for i in range(len(shapes)):
        best: Narrowest = (float("inf"), -1, None)
        for j in np.argsort(bounds[i], kind="stable").tolist():
            if owner[i] == owner[j]:
                continue
            if bounds[i, j] >= best[0]:
                break
            pair = (min(i, j), max(i, j))
            if pair not in known:
                known[pair] = closest_approach(shapes[pair[0]], shapes[pair[1]])
            if known[pair].distance < best[0]:
                best = (known[pair].distance, j, known[pair])
        found.append(best)
    return found


def narrow_notices(
    bodies: Sequence[Body], names: Sequence[str], narrowest: Sequence[Narrowest], unit: str | None
) -> list[Notice]:
    """Tell of gaps that the first panels cannot see, and what refinement they will take.

    Parameters
    ----------
    bodies : sequence of Body
    names : sequence of str
        What to call each body.
    narrowest : sequence
        From `narrowest_gaps`.
    unit : str or None

    Returns
    -------
    list of Notice
        One for each pair, the narrowest first.
    """
    told: dict[tuple[int, int], tuple[float, str]] = {}
    for k, (distance, other, approach) in enumerate(narrowest):
        if approach is None:
            continue
        size = min(bodies[k].diagonal, bodies[other].diagonal)
        halvings = ceil(log2(max(_START * size / distance, 1.0)))
        pair = (min(k, other), max(k, other))
        if halvings < _HALVINGS or pair in told:
            continue
        text = (
            f"the gap of {length_text(distance, unit)} between {names[pair[0]]} and {names[pair[1]]} at "
            f"{place_text(approach.point_a, unit)} is {size / distance:,.0f} times narrower than the smaller body: "
            f"along its rim panels are halved up to {halvings} times, down to the gap, before the result is believed"
        )
        told[pair] = distance, text
    return [Notice("narrow-gap", text) for _, text in sorted(told.values())]
