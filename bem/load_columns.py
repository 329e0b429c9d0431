"""Loads as further columns of the system beside the conductors, with their images.

A load l acts on the panels by its potential and by the flux of its field. By reciprocity the charge that it induces
on the earthed conductor i is minus its own charge times the potential of the state "conductor i at 1 V" where it
lies: the functional ``q_l(tau) = -(potential of tau, weighted with the free charge of the load)`` extends the Maxwell
matrix symmetrically, and its adjoint is, as for a conductor, the free charge and minus the potential of the load's
own state. Value and uncertainty of all entries then come from the same two-level products.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .bisection import children
from .errors import InputError
from .frames import panel_frames
from .given_charge import Load, UniformField
from .images import Images
from .media import Media
from .panels import Panels

__all__ = ["LoadColumns", "check_loads", "load_columns"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class LoadColumns:
    """What the loads do to the parts of panels, bare; L loads, in one set of permittivities.

    Attributes
    ----------
    potential : (n_panels, 4, L) float or complex, V m2
        Integral of the potential over each part.
    flux : (n_panels, 4, L) float or complex, V m
        Flux of the field through each part.
    weight : (n_panels, 4, L) float or complex, V m2
        Integral of the potential weighted with the free charge: what `q_l` takes, without its sign.
    """

    potential: NDArray[Any]
    flux: NDArray[Any]
    weight: NDArray[Any]


def check_loads(loads: Sequence[Load], media: Media, images: Images) -> None:
    """Raise InputError where loads do not fit media or planes."""
    for number, load in enumerate(loads):
        if load.medium is not None and not 0 <= load.medium < len(media.permittivity):
            raise InputError(f"load {number + 1} lies in medium {load.medium}, which does not exist")
        if isinstance(load, UniformField):
            for plane in images.planes:
                along = load.field - (load.field @ plane.normal) * plane.normal if plane.electric else None
                wrong = along if along is not None else (load.field @ plane.normal) * plane.normal
                if np.linalg.norm(wrong) > 1e-9 * np.linalg.norm(load.field):
                    kind = "at right angles to an earthed plane" if plane.electric else "along a magnetic wall"
                    raise InputError(f"a uniform field must point {kind}")
    if loads and images.half_space is not None:
        raise InputError("given charge and external fields over a half-space are not modelled; use a dielectric body")


def load_columns(loads: Sequence[Load], panels: Panels, media: Media, images: Images) -> list[LoadColumns]:
    """Columns of all loads for each set of permittivities."""
    parts = children(panels.corners, panels.n_corners).reshape(-1, 4, 3)
    copies, signs = images.copies(parts, np.full(len(parts), 4))
    potential, flux = np.zeros((len(parts), len(loads))), np.zeros((len(parts), len(loads)))
    for corners, sign in zip(copies, signs, strict=True):
        frames = panel_frames(corners)
        for k, load in enumerate(loads):
            if isinstance(load, UniformField) and corners is not copies[0]:
                continue  # given as it is, walls included
            found = load.moments(frames)
            potential[:, k] += sign * found[0]
            flux[:, k] += sign * found[1]
    shape = (len(panels), 4, len(loads))
    potential, flux = potential.reshape(shape), flux.reshape(shape)
    columns = []
    for s in range(media.n_states):
        value: NDArray[Any] = media.permittivity[:, s]
        value = value if media.permittivity.imag.any() else value.real
        weaken = np.array([1.0 if load.medium is None else 1.0 / value[load.medium] for load in loads])
        free = np.array([value[0] if load.medium is None else 1.0 for load in loads])
        columns.append(LoadColumns(weaken * potential, weaken * flux, free * potential))
    return columns
