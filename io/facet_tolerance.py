"""How closely the facets of a curved shape are to follow it."""

from dataclasses import dataclass
from typing import Any

from daraf.bem.errors import InputError

from .units import parse_quantity

__all__ = ["FacetTolerance", "parse_facet_tolerance"]

#: Limits of the relative tolerance: coarser loses the shape, finer costs memory for nothing.
_FINEST, _COARSEST = 1e-6, 0.05


@dataclass(frozen=True)
class FacetTolerance:
    """Largest distance between facets and the true shape: in metres, or as a share of the diagonal of the file's box.

    Attributes
    ----------
    length : float or None, m
    share : float or None
        Exactly one of the two is given.
    """

    length: float | None = None
    share: float | None = None

    def metres(self, diagonal: float) -> float:
        """The tolerance for a file whose box has this diagonal, m."""
        return self.length if self.length is not None else (self.share or 0.0) * diagonal


def parse_facet_tolerance(value: Any) -> FacetTolerance:
    """Tolerance of facets: text with a unit of length or with "%", or a number in metres.

    Parameters
    ----------
    value : str or float

    Returns
    -------
    FacetTolerance

    Raises
    ------
    InputError
        If it is neither, or not positive, or a share outside of 0.0001 % to 5 %.

    Examples
    --------
    >>> parse_facet_tolerance("0.02 mm"), parse_facet_tolerance("0.1 %")
    (FacetTolerance(length=2e-05, share=None), FacetTolerance(length=None, share=0.001))
    """
    if isinstance(value, FacetTolerance):
        return value
    if isinstance(value, str) and value.rstrip().endswith("%"):
        share = parse_quantity(value, "ratio")
        if not _FINEST <= share <= _COARSEST:
            raise InputError(f"facet tolerance {value!r} is outside 0.0001 % to 5 % of the size; write such as '0.1 %'")
        return FacetTolerance(share=share)
    length = parse_quantity(value, "length")
    if not length > 0.0:
        raise InputError(f"facet tolerance {value!r} is not positive; write text such as '0.02 mm' or '0.1 %'")
    return FacetTolerance(length=length)
