"""A result charged for evaluation off its surfaces: as stated, or at potentials given later."""

from collections.abc import Mapping

import numpy as np

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.errors import InputError
from daraf.bem.network import Excitation, excite
from daraf.bem.panels import Panels
from daraf.bem.probing import ChargedPanels, charged_panels

from .mesh_units import METRES_PER_UNIT
from .result import Result
from .surface_file import SolvedSurface

__all__ = ["charged_result", "result_unit"]


def result_unit(result: Result) -> str:
    """Length unit of the surface files of a result; metres where they state their own or differ.

    Parameters
    ----------
    result : Result

    Returns
    -------
    str
    """
    unit = result.document.get("case", {}).get("unit")
    return unit if unit in METRES_PER_UNIT else "m"


def charged_result(result: Result, potentials: Mapping[str, float] | None = None) -> ChargedPanels:
    """Charge the panels of a result.

    Parameters
    ----------
    result : Result
    potentials : mapping of str to float, V, optional
        By conductor, the others at 0 V; the stated potentials and charges if left out.

    Returns
    -------
    daraf.bem ChargedPanels

    Raises
    ------
    InputError
        If a conductor is unknown, nothing was stated, or the folder lacks what is needed.
    """
    surface, document = result.surface, result.document
    state = _stated(result) if potentials is None else _at_potentials(result, potentials)
    fill = surface.body_fill
    if fill is None:
        raise InputError(f"{result.folder}: made by a version that did not keep what fields need; solve the case again")
    return charged_panels(
        _panels(surface),
        surface.densities,
        state,
        FOUR_PI_EPSILON_0 * float(document["solution"]["relative_permittivity"]),
        fill=fill,
        facet_offset=surface.facet_offset,
        previous=surface.previous,
    )


def _panels(surface: SolvedSurface) -> Panels:
    regions = np.zeros(len(surface.corners), np.int64)
    return Panels(surface.corners, surface.n_corners, surface.body, surface.conductor, regions)


def _stated(result: Result) -> Excitation:
    document = result.document
    potential, charge, energy = document["potential"], document["charge"], document["energy"]
    if potential["value"] is None:
        raise InputError(
            f"{result.folder}: the case states no potentials; give them with --conductor NAME or --potential NAME=VALUE"
        )
    return Excitation(
        np.array(potential["value"]),
        np.array(potential["uncertainty"]),
        np.array(charge["value"]),
        np.array(charge["uncertainty"]),
        energy["value"],
        energy["uncertainty"],
    )


def _at_potentials(result: Result, potentials: Mapping[str, float]) -> Excitation:
    names = result.document["conductors"]
    for name in potentials:
        if name not in names:
            raise InputError(
                f"{result.folder}: no conductor is named {name!r}; there are {', '.join(map(repr, names))}"
            )
    volts = np.array([potentials.get(name, 0.0) for name in names], dtype=float)
    capacitance = result.document["capacitance"]
    held = np.ones(len(names), bool)
    return excite(capacitance["maxwell"], capacitance["maxwell_uncertainty"], held, volts)
