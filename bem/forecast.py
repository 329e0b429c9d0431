"""Where refinement stands and how long it still has to go, from how it went so far."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from .solution import Pass

__all__ = ["Goal", "rough_duration", "time_to_goal"]

#: Slowest fall of the uncertainty with the number of panels, as a power, that is worth a forecast.
_SLOWEST = 0.2
#: Seconds of a pass grow with this power of the number of panels: between one new column and a factorisation.
_LEAST_POWER, _MOST_POWER = 1.0, 3.0
#: How far back is looked, as a factor in panels: earlier passes do not see the narrow gaps yet, and from one pass to
#: the next the uncertainty jumps.
_SEEN = 2.0


def time_to_goal(passes: Sequence[Pass], accuracy: float, most: int) -> float | None:
    """Seconds that the passes still to come will take.

    The uncertainty is taken to fall, and the seconds to rise, with the powers of the number of panels seen over the
    last passes, and the panels to grow by the last factor from pass to pass. Nothing is foretold over more than the
    panels have grown already.

    Parameters
    ----------
    passes : sequence of Pass
    accuracy : float
        Relative, asked.
    most : int
        Most panels there is room for.

    Returns
    -------
    float or None
        None before two passes, where the uncertainty does not fall, the goal is too far off to tell, or there is no
        room for so many panels.
    """
    if len(passes) < 2:
        return None
    before, last = passes[-2], passes[-1]
    first = next((one for one in reversed(passes) if one.panels * _SEEN <= last.panels), passes[0])
    growth = last.panels / before.panels
    if growth <= 1.0 or not last.uncertainty > 0.0 or not first.uncertainty > 0.0:
        return None
    if last.uncertainty <= accuracy:
        return 0.0
    grown = math.log(last.panels / first.panels)
    fall = math.log(first.uncertainty / last.uncertainty) / grown
    if fall < _SLOWEST:
        return None
    needed = last.panels * (last.uncertainty / accuracy) ** (1.0 / fall)
    if needed > most or needed * passes[0].panels > last.panels**2:
        return None
    power = math.log(max(last.seconds, 1e-6) / max(first.seconds, 1e-6)) / grown
    power = min(max(power, _LEAST_POWER), _MOST_POWER)
    panels, total = float(last.panels), 0.0
    while panels < needed:
        panels *= growth
        total += last.seconds * (panels / last.panels) ** power
    return total


def rough_duration(seconds: float) -> str:
    """Time in words, with no more digits than a forecast deserves.

    Examples
    --------
    >>> rough_duration(0.3), rough_duration(23.4), rough_duration(130), rough_duration(7300)
    ('1 s', '20 s', '2.2 min', '2 h')
    """
    for unit, size in (("h", 3600.0), ("min", 60.0)):
        if seconds >= 1.5 * size:
            return f"{float(f'{seconds / size:.2g}'):g} {unit}"
    return f"{float(f'{max(seconds, 1.0):.1g}'):g} s"


@dataclass(frozen=True)
class Goal:
    """What is asked of the refinement.

    Attributes
    ----------
    accuracy : float
        Relative.
    most : int
        Most panels there is room for.
    names : tuple of str
        Of the conductors.
    """

    accuracy: float
    most: int
    names: tuple[str, ...]

    def standing(self, passes: Sequence[Pass]) -> str:
        """Where the last pass stands, in words, and how long it will take to the goal if that can be told."""
        last = passes[-1]
        one, other = (self.names[k] for k in last.entry)
        place = one if one == other else f"{one} - {other}"
        text = f"uncertainty {100 * last.uncertainty:.2g} % ({place}, {last.cause}), asked {100 * self.accuracy:.3g} %"
        left = time_to_goal(passes, self.accuracy, self.most)
        return f"{text}, about {rough_duration(left)} to the goal" if left else text
