"""Media: which side of each surface is filled with what, and what that makes of the integral equations.

The unknown is the *total* charge density (free and bound) on conductors and on the interfaces between dielectrics.
Its potential must be that of the conductor on conductors; on interfaces the free charge must vanish. With the
permittivities e+ and e- in front of and behind a panel, E the normal field of all other charges, the free charge is

    F sigma = (e+ - e-) E / (4 pi) + (e+ + e-) / 2 sigma       (bare: charges over 4 pi epsilon_0)

and the flux of E over the panel is taken from :mod:`daraf.bem.flux`.

Why so. The operators satisfy the identity <S a, F b> = <F a, S b> for all charges a, b (both sides are the field
energy of the two), S the single-layer potential. The functional "free charge of conductor i" therefore has as its
adjoint solution the free charge density of the state "conductor i at 1 V" on conductors, and minus its potential on
interfaces. Both are bounded by the same singularities as the state itself, both are approximated by constants, and
Galerkin testing of both rows makes the error of a capacitance the product of two errors. Three conditions:

* interface rows tested by flux over the panel. Collocated at centroids they lose Gauss's law: free charges were off
  by 4 to 10 % at a ratio of 4, by 160 % at 80;
* inside a closed conductor that touches several media there is no field, so that any permittivity may be put there,
  but it must be *one*: with each panel's own ("free charge = e+ sigma") the adjoint is singular like 1/r at the line
  where the media meet. The smallest one of the media touched is taken: then the charge under a medium of high
  permittivity is read from the flux on the medium's side, which Gauss's law ties to the flux out of the medium;
* the fluxes through the boundary of each medium add up exactly. The column sums of a closed boundary are 4 pi, 2 pi
  or 0 times the area of the source; the rounding of the rules (1e-7) is removed in proportion to the entries. At a
  ratio of 10,000 it would otherwise come back 10,000 times larger.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .panels import Panels
from .surface import Surface

__all__ = ["METAL", "Media", "PanelMedia"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
ComplexArray = NDArray[np.complex128]

#: Stands for the inside of a closed conductor.
METAL = -1


@dataclass(frozen=True, eq=False)
class PanelMedia:
    """Permittivities at every panel.

    Attributes
    ----------
    interface : (n_panels,) bool
        Panels between two dielectrics, without free charge.
    crossed : (n_panels,) bool
        Interfaces, and conductor panels with different media on their two sides, one standing for the inside of metal.
    outside, inside : (n_panels,) float or complex
        Relative permittivity in front of the panel (where its normal points) and behind it.
    boundary : list of (n_panels,) int
        For each medium at a crossed panel: 1 where its boundary's outward normal is the panel's, -1 where it is the
        opposite, 0 elsewhere.
    """

    interface: BoolArray
    crossed: BoolArray
    outside: NDArray[Any]
    inside: NDArray[Any]
    boundary: list[IntArray]

    @property
    def jump(self) -> NDArray[Any]:
        """``e+ - e-``, (n_panels,)."""
        return np.asarray(self.outside - self.inside)

    @property
    def mean(self) -> NDArray[Any]:
        """``(e+ + e-) / 2``, (n_panels,)."""
        return np.asarray(0.5 * (self.outside + self.inside))


@dataclass(frozen=True, eq=False)
class Media:
    """What fills the space around and between the bodies of a surface.

    Where two bodies touch, the surface must hold the shared part once, as a body of its own with its two sides
    named here: a conductor on a dielectric is one sheet of conductor with metal behind it.

    Parameters
    ----------
    permittivity : (n_media,) or (n_media, n_states) float or complex
        Relative, for each medium, the first of which fills the space beyond everything; further columns are further
        states (frequencies), real or complex with a negative imaginary part for losses.
    outside, inside : (n_bodies,) int
        Medium in front of each body's surface and behind it; ``METAL`` behind a closed conductor.
    n_conductors : int
        Groups of ``surface.body_conductor`` from this number on are interfaces.
    whole : (n_bodies,) int, optional
        Bodies with equal numbers are pieces of one drawn surface, cut where media meet; by default each stands alone.

    Raises
    ------
    InputError
        If shapes or values do not fit.
    """

    permittivity: ComplexArray
    outside: IntArray
    inside: IntArray
    n_conductors: int
    whole: IntArray | None = None

    def __post_init__(self) -> None:
        put = object.__setattr__
        value = np.asarray(self.permittivity, dtype=np.complex128)
        put(self, "permittivity", value.reshape(len(value), -1))
        put(self, "outside", np.ascontiguousarray(self.outside, dtype=np.int64))
        put(self, "inside", np.ascontiguousarray(self.inside, dtype=np.int64))
        if self.whole is None:
            put(self, "whole", np.arange(len(self.outside)))
        put(self, "whole", np.ascontiguousarray(self.whole, dtype=np.int64))
        if not np.isfinite(self.permittivity).all() or (self.permittivity.real < 1.0).any():
            raise InputError("media: every relative permittivity must be finite and at least 1")
        if (self.permittivity.imag > 0.0).any():
            raise InputError("media: losses are a negative imaginary part of the permittivity, not a positive one")
        n = len(self.permittivity)
        if self.outside.min() < 0 or max(self.outside.max(), self.inside.max()) >= n or self.inside.min() < METAL:
            raise InputError(f"media: a side names a medium that does not exist; there are {n}, from 0")

    @property
    def n_states(self) -> int:
        """Number of sets of permittivities."""
        return int(self.permittivity.shape[1])

    def check(self, surface: Surface) -> None:
        """Raise InputError if the media do not fit the surface."""
        if self.outside.shape != (surface.n_bodies,) or self.inside.shape != (surface.n_bodies,):
            raise InputError(f"media: outside and inside must name one medium for each of {surface.n_bodies} bodies")
        if self.whole is None or self.whole.shape != (surface.n_bodies,):
            raise InputError(f"media: whole must name one drawn surface for each of {surface.n_bodies} bodies")
        if not 0 <= self.n_conductors <= surface.n_conductors:
            raise InputError(f"media: {self.n_conductors} conductors are named, the surface has {surface.n_conductors}")
        interface = surface.body_conductor >= self.n_conductors
        if (self.inside[interface] == METAL).any():
            raise InputError("media: an interface needs a medium on either side")

    def at(self, panels: Panels, state: int = 0) -> PanelMedia:
        """Permittivities at every panel.

        Parameters
        ----------
        panels : Panels
        state : int
            Column of `permittivity`.

        Returns
        -------
        PanelMedia
            Real where nothing is lossy.
        """
        alike = np.unique(self.permittivity, axis=0, return_inverse=True)[1].reshape(-1)
        outside, inside = self.outside[panels.body], self.inside[panels.body]
        inside = np.where(inside == METAL, self._stand_in(panels)[panels.conductor], inside)
        front, back = alike[outside], alike[inside]
        crossed = front != back
        needed = np.unique(np.concatenate([front[crossed], back[crossed]]))
        boundary = [(back == medium).astype(np.int64) - (front == medium) for medium in needed]
        interface = panels.conductor >= self.n_conductors
        lossy = self.permittivity.imag.any()
        value: NDArray[Any] = self.permittivity[:, state] if lossy else self.permittivity[:, state].real
        return PanelMedia(interface, crossed | interface, value[outside], value[inside], boundary)

    def _stand_in(self, panels: Panels) -> IntArray:
        """Medium of the smallest permittivity that each conductor touches, to stand for its inside."""
        best = np.zeros(panels.n_conductors, dtype=np.int64)
        touched = self.outside[panels.body]
        for conductor in range(panels.n_conductors):
            own = np.unique(touched[(panels.conductor == conductor) & (self.inside[panels.body] == METAL)])
            if len(own):
                best[conductor] = own[np.argmin(np.abs(self.permittivity[own, 0]))]
        return best
