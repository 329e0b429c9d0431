"""What may be changed of the geometry that a file holds, and what was changed."""

from dataclasses import dataclass

from daraf.bem.errors import InputError

from .mesh_units import METRES_PER_UNIT

__all__ = ["HOLE_SIZE", "MODES", "Change", "Mend", "Place", "length_text", "place_text"]

Place = tuple[float, float, float]

MODES = ("list", "safe", "bold")

#: Holes up to this share of the part, corner to corner, are closed by bold mending unless a length is stated.
HOLE_SIZE = 0.1


@dataclass(frozen=True)
class Mend:
    """How far mending may go.

    Attributes
    ----------
    mode : {"list", "safe", "bold"}
        "list": nothing is changed, faults are listed and an unfit body is refused; "safe": what does not
        change the shape by more than its own rounding; "bold": also stitches cracks that can be seen, and
        adds faces to close small holes.
    within : float or None, m
        Nothing moves farther than this. By default the rounding of the file ("safe") or a ten-thousandth
        of the part ("bold").
    holes : float or None, m
        Largest hole to be closed, corner to corner; by default a tenth of the part, and only with "bold".
    """

    mode: str = "safe"
    within: float | None = None
    holes: float | None = None

    def __post_init__(self) -> None:
        if self.mode not in MODES:
            raise InputError(f"mend: {self.mode!r} is no way of mending; write one of {', '.join(MODES)}")
        for name, value in (("within", self.within), ("holes", self.holes)):
            if value is not None and not 0.0 < value < float("inf"):
                raise InputError(f"mend: {name} must be a length above 0, got {value!r}")

    @property
    def changes(self) -> bool:
        """Whether anything may be changed."""
        return self.mode != "list"

    def reach(self, rounding: float, size: float) -> float:
        """How far a vertex may move, m.

        Parameters
        ----------
        rounding : float, m
            Of the coordinates in the file.
        size : float, m
            Diagonal of the part.
        """
        if self.within is not None:
            return self.within
        # 1e-4: a hundredth of the default accuracy, should the whole surface move by it
        return max(rounding, 1e-4 * size) if self.mode == "bold" else rounding

    def hole_size(self, size: float) -> float:
        """Largest hole to be closed, m; 0 for none."""
        if self.mode != "bold":
            return 0.0
        return HOLE_SIZE * size if self.holes is None else self.holes


@dataclass(frozen=True)
class Change:
    """One change made to a body.

    Attributes
    ----------
    code : str
        Stable word for scripts, such as ``stitched``.
    count : int
        Of what was changed.
    place : tuple of 3 float or None, m
        Where the first of them is.
    text : str
        What was done.
    moved : float or None, m
        Nothing moved farther than this; None if nothing moved at all.
    """

    code: str
    count: int
    place: Place | None
    text: str
    moved: float | None = None

    def __str__(self) -> str:
        return self.text

    def said(self, unit: str | None) -> str:
        """What was done and where, in a unit of length; without one, as the numbers stand."""
        text = self.text
        if self.place is not None:
            text += f", {'first ' if self.count > 1 else ''}at {place_text(self.place, unit)}"
        if self.moved is not None:
            text += f"; nothing moved by more than {length_text(self.moved, unit)}"
        return text


def length_text(length: float, unit: str | None) -> str:
    """Length in a unit, such as "0.01 mm"; without one, as the number stands."""
    return f"{length:.2g}" if unit is None else f"{length / METRES_PER_UNIT[unit]:.2g} {unit}"


def place_text(place: Place, unit: str | None) -> str:
    """Place in a unit of length, such as "(1, 0, 2.5) mm"; without one, as the numbers stand.

    Parameters
    ----------
    place : tuple of 3 float, m
    unit : str or None

    Returns
    -------
    str
    """
    scale = 1.0 if unit is None else METRES_PER_UNIT[unit]
    least = 1e-9 * max(abs(value) for value in place)  # what is nothing beside the others is 0
    numbers = ", ".join(f"{value / scale if abs(value) > least else 0.0:.5g}" for value in place)
    return f"({numbers})" if unit is None else f"({numbers}) {unit}"
