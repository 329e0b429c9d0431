"""Maxwell capacitance matrix of conductors among dielectrics, lossy ones too, with its uncertainty."""

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .capacitance import FIRST_PASS, INTEGRATION, MOST_AT_START, MOST_DENSE, POINTLESS, _accuracies
from .constants import FOUR_PI_EPSILON_0
from .creases import find_creases
from .drawn import drawn_surface
from .errors import InputError
from .facets import Facets, facet_meaning, greatest_turn, move_facets
from .flats import panel_regions
from .given_charge import Load
from .images import Images
from .load_columns import check_loads
from .media import METAL, Media
from .media_adaptive import MediaPass, MediaPlan, media_pass, plan_next_media
from .media_extrapolation import feared_decay, media_spread
from .media_facets import media_facet_uncertainty
from .memory import free_memory, panels_that_fit, peak_memory, refuse_if_too_large
from .panels import Panels
from .refinement import accuracy_targets
from .regions import find_regions
from .solution import Notice, Pass
from .start import Start, starting_panels
from .surface import Surface

__all__ = ["MediaSolution", "solve_media"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Array = NDArray[Any]
Progress = Callable[..., None]

#: Entries of a load below this share of sqrt(C_ii C_jj) must meet the accuracy of this share only.
LOAD_FLOOR = 0.1
#: Matrices of a pass held at once: the integrals, the system and its factor, and the integrals of the pass before.
_MATRICES = 4


@dataclass(frozen=True, eq=False)
class MediaSolution:
    """Complex Maxwell matrices with their uncertainties, S states (sets of permittivities) of n conductors.

    Attributes
    ----------
    conductor_names : tuple of str
    maxwell : (S, n, n) float or complex, F
        n counts conductors, then loads. Entry (conductor, load) is the charge in C that the load induces on the
        earthed conductor, (load, load) minus the energy in J of the one in the other's induced charges (minus
        twice the energy for the same one), with all conductors earthed.
        Its negative imaginary part times the angular frequency is the conductance matrix.
    maxwell_uncertainty : (S, n, n) float or complex, F
        Expanded, k = 2: of the real part, and in the imaginary part that of the imaginary part.
    to_infinity, to_infinity_uncertainty : (S, n) float or complex, F
        Row sums.
    budget : dict of str to (S, n, n) float or complex, F
    accuracy : float
    reached : bool
    media : Media
    panels : Panels
    state : (S, n, n_panels) float or complex, C/m2 per V
        Total charge density (free and bound) with conductor i at 1 V: its vacuum field is the field.
    free : (S, n, n_panels) float or complex, C/m2 per V
        Free charge density on conductors; on interfaces 0.
    passes : list of Pass
        Real parts of the first state, conductors and loads alike.
    method : str
    seconds : dict of str to float
    peak_memory_bytes : int
    warnings : list of Notice
    interrupted : bool
    """

    conductor_names: tuple[str, ...]
    maxwell: Array
    maxwell_uncertainty: Array
    to_infinity: Array
    to_infinity_uncertainty: Array
    budget: dict[str, Array]
    accuracy: float
    reached: bool
    media: Media
    panels: Panels
    state: Array
    free: Array
    passes: list[Pass]
    method: str
    seconds: dict[str, float]
    peak_memory_bytes: int
    warnings: list[Notice]
    interrupted: bool = False


@dataclass(frozen=True, eq=False)
class _Run:
    """How the solve went."""

    passes: list[Pass]
    seconds: dict[str, float]
    notices: list[Notice]
    interrupted: bool


@dataclass(frozen=True, eq=False)
class _Judgement:
    """Value and uncertainty, bare; the last column is the sum over all conductors."""

    value: Array
    lines: dict[str, Array]
    total: Array
    targets: FloatArray
    n_passes: int

    @property
    def missed(self) -> BoolArray:
        """Entries not accurate enough yet; after one pass alone they must be so by far to be believed."""
        n = self.targets.shape[1]
        missed = np.abs(self.total[:, :, :n]) > self.targets
        if self.n_passes == 1:
            missed |= np.abs(self.lines["discretisation"][:, :, :n]) > FIRST_PASS * self.targets
        return np.asarray(missed)

    @property
    def pointless(self) -> bool:
        """Whether no entry that misses its target would gain from smaller panels."""
        n = self.targets.shape[1]
        fixed = np.hypot(np.abs(self.lines["facets"]), np.abs(self.lines["integration"]))
        return bool((~self.missed | (np.abs(self.lines["discretisation"]) < POINTLESS * fixed)[:, :, :n]).all())


def solve_media(  # noqa: PLR0913 (all but two are options by name)
    surface: Surface,
    media: Media,
    *,
    images: Images | None = None,
    loads: Sequence[Load] = (),
    accuracy: float = 0.01,
    memory_limit: int | None = None,
    facets: str = "auto",
    want: Sequence[tuple[int, int]] | None = None,
    progress: Progress | None = None,
) -> MediaSolution:
    """Maxwell capacitance matrix of conductors among dielectrics.

    Parameters
    ----------
    surface : Surface
        Conductors first; groups of ``body_conductor`` from ``media.n_conductors`` on are interfaces.
    media : Media
    images : Images, optional
        Mirror planes or a half-space. All charges are those of the modelled side. With a half-space the only medium
        must be a single one of permittivity 1, since the half-space brings its own.
    loads : sequence of Load
        Given charge and external fields: further rows and columns of the matrix after the conductors.
    accuracy : float
        Relative expanded uncertainty asked; this and what follows as in :func:`daraf.bem.solve_capacitance`.
    memory_limit : int, optional
        Bytes.
    facets : {"auto", "round", "as drawn"}
    want : sequence of (int, int), optional
        Entries of the matrix, loads counted after the conductors.
    progress : callable, optional

    Returns
    -------
    MediaSolution

    Raises
    ------
    InputError
        If media and surface do not fit, or the boundary of a medium is not closed.
    MemoryRefused
        If the coarsest panels would not fit into memory.
    """
    media.check(surface)
    if not 0.0 < accuracy < 1.0:
        raise InputError(f"accuracy must lie between 0 and 1, got {accuracy:g}")
    n = media.n_conductors + len(loads)
    allowed = _accuracies(accuracy, want, n)
    begin = time.perf_counter()
    limit = memory_limit if memory_limit is not None else int(0.9 * free_memory())
    report = progress or (lambda *_: None)
    images = images or Images()
    _check_half_space(images, media)
    check_loads(loads, media, images)
    if media.n_conductors + len(loads) == 0:
        raise InputError("nothing to solve: neither a conductor nor a load is given")
    start, round_parts, notices, most = _prepared(surface, media, images, facet_meaning(facets), limit)
    most = max(len(start.panels), min(most, MOST_DENSE, int((limit / (_MATRICES * 8.0 * _cells(media))) ** 0.5)))
    seconds = {"panels": time.perf_counter() - begin}
    images.place(start.panels, surface.body_names)
    refined = np.zeros(surface.n_bodies, dtype=np.int64)
    plan: MediaPlan | None = MediaPlan(start.panels, start.symmetric, start.sides, refined)
    passes: list[Pass] = []
    result = judgement = None
    interrupted = False
    try:
        while plan is not None:
            note = f"pass {len(passes) + 1}, {len(plan.panels)} panels"
            clock = time.perf_counter()
            result = media_pass(plan, media, images, _noted(report, note), loads)
            judgement = _judge(result, media, images, round_parts, allowed, len(passes) + 1)
            passes.append(_told(result, judgement, accuracy, time.perf_counter() - clock))
            excess = passes[-1].uncertainty / accuracy
            report("pass", float(len(passes)), 0.0, f"{note}, uncertainty {excess:.3g} x the one asked")
            for stage, time_spent in result.seconds.items():
                seconds[stage] = seconds.get(stage, 0.0) + time_spent
            done = not judgement.missed.any() or judgement.pointless
            plan = None if done else _next(result, judgement, most)
    except KeyboardInterrupt:
        if judgement is None:
            raise
        interrupted = True
    assert result is not None
    assert judgement is not None
    seconds["total"] = time.perf_counter() - begin
    return _solution(surface, media, result, judgement, _Run(passes, seconds, notices, interrupted), accuracy)


def _told(result: MediaPass, judgement: _Judgement, accuracy: float, seconds: float) -> Pass:
    """One pass for the record, F."""
    n = judgement.targets.shape[1]
    excess = np.abs(judgement.total[:, :, :n]) / judgement.targets
    _, i, j = np.unravel_index(np.argmax(excess), excess.shape)
    cause = max(judgement.lines, key=lambda line: float(np.abs(judgement.lines[line][:, i, j]).max()))
    raw = FOUR_PI_EPSILON_0 * result.value[0].real
    return Pass(
        len(result.panels),
        raw,
        FOUR_PI_EPSILON_0 * result.limit[0].real - raw,
        FOUR_PI_EPSILON_0 * judgement.total[0, :, :n].real,
        seconds,
        float(excess.max()) * accuracy,
        (int(i), int(j)),
        cause,
    )


def _check_half_space(images: Images, media: Media) -> None:
    if images.half_space is None:
        return
    if len(media.permittivity) != 1 or np.any(media.permittivity != 1.0) or np.any(media.inside != METAL):
        raise InputError(
            "half-space: images hold for conductors alone; leave out the dielectric bodies, or model the half-space as "
            "a large dielectric body"
        )


def _prepared(
    surface: Surface, media: Media, images: Images, meaning: str, limit: int
) -> tuple[Start, Facets | None, list[Notice], int]:
    """Panels to start from, the round parts, notices, and the most panels that there is room for."""
    turn = greatest_turn(meaning)
    regions, notices = find_regions(surface)
    panels, more = panel_regions(surface, regions, creases=find_creases(surface, regions, greatest_turn=turn))
    refuse_if_too_large(len(panels), surface.n_conductors, limit, fast=False)
    most = max(len(panels), min(MOST_DENSE, panels_that_fit(limit, surface.n_conductors, fast=False)))
    assert media.whole is not None
    drawn = drawn_surface(surface, media.whole, images, greatest_turn=turn)
    decays = drawn.side_decays(panels)
    round_parts = None if meaning == "as drawn" else drawn.facets_of(surface, regions)
    if round_parts is not None:
        panels = drawn.closed(panels, move_facets(round_parts, panels))
    return (
        starting_panels(panels, decays, max(len(panels), min(MOST_AT_START, most // 4))),
        round_parts,
        notices + more,
        most,
    )


def _noted(report: Progress, note: str) -> Callable[[str, float, float], None]:
    return lambda stage, done, total: report(stage, done, total, note)


def _cells(media: Media) -> float:
    """Numbers per matrix entry: complex ones take two."""
    return 1.5 if media.permittivity.imag.any() else 1.0


def _judge(
    result: MediaPass, media: Media, images: Images, round_parts: Facets | None, accuracy: FloatArray, n_passes: int
) -> _Judgement:
    """Extrapolated value with the lines of its budget, one column more for the sum over all conductors."""
    n = result.value.shape[1]
    sums = np.hstack([np.eye(n), (np.arange(n) < media.n_conductors).astype(np.float64)[:, None]])
    value = result.limit @ sums
    diagonal = np.abs(np.einsum("sii->si", result.limit))
    scale = np.sqrt(diagonal[:, :, None] * diagonal[:, None, :])
    scale = np.concatenate([scale, scale.max(axis=2, keepdims=True)], axis=2)
    lossy = np.iscomplexobj(value)
    both = (1.0 + 1.0j) if lossy else 1.0
    lines: dict[str, Array] = {
        "discretisation": np.array([_spread(result, s, sums) for s in range(len(value))]),
        "facets": np.zeros_like(value),
        "integration": both * INTEGRATION * scale,
        "reciprocity": both * np.concatenate([result.defect, result.defect.sum(axis=2, keepdims=True)], axis=2),
    }
    if round_parts is not None and round_parts.any:
        placed = images.place(result.panels)
        lines["facets"] = both * np.array(
            [
                media_facet_uncertainty(
                    round_parts,
                    result.panels,
                    media.at(result.panels, s),
                    (result.state[s], result.adjoint[s]),
                    placed,
                    sums,
                )
                for s in range(len(value))
            ]
        )
    total = _root_of_squares(list(lines.values()))
    targets = np.array([_targets(np.abs(v[:, :n]), accuracy, media.n_conductors) for v in value])
    return _Judgement(value, lines, total, targets, n_passes)


def _targets(size: FloatArray, accuracy: FloatArray, n_conductors: int) -> FloatArray:
    """Largest uncertainty allowed of every entry; those of loads may cancel and are held to a share of the diagonal."""
    targets = accuracy_targets(size, accuracy)
    floor = accuracy * LOAD_FLOOR * np.sqrt(np.outer(np.diag(size), np.diag(size)))
    load = np.arange(len(size)) >= n_conductors
    return np.asarray(np.where(load[:, None] | load, np.maximum(targets, floor), targets))


def _root_of_squares(lines: list[Array]) -> Array:
    real = np.sqrt(sum(line.real**2 for line in lines))
    if not any(np.iscomplexobj(line) for line in lines):
        return np.asarray(real)
    return np.asarray(real + 1j * np.sqrt(sum(line.imag**2 for line in lines)))


def _spread(result: MediaPass, state: int, sums: FloatArray) -> Array:
    return media_spread(
        result.feared[state],
        feared_decay(result.gains[state], result.feared[state], result.decay),
        result.realised,
        result.drift,
        result.panels.body,
        None if result.change is None else result.change[state],
        sums,
        result.refined,
    )


def _next(result: MediaPass, judgement: _Judgement, most: int) -> MediaPlan | None:
    """Plan of the next pass, or None if there is no room for it."""
    n = judgement.targets.shape[1]
    plan = plan_next_media(result, np.abs(judgement.lines["discretisation"][:, :, :n]) / judgement.targets**2)
    return None if len(plan.panels) > most else plan


def _solution(
    surface: Surface, media: Media, result: MediaPass, judgement: _Judgement, run: _Run, accuracy: float
) -> MediaSolution:
    """Farads, and what kept the accuracy from being reached."""
    n = result.value.shape[1]
    value, total = FOUR_PI_EPSILON_0 * judgement.value, FOUR_PI_EPSILON_0 * judgement.total
    reached, notices = not judgement.missed.any(), run.notices
    metal = np.flatnonzero(result.panels.conductor < media.n_conductors)
    free = np.zeros_like(result.adjoint)
    free[:, metal] = result.adjoint[:, metal]
    if not reached:
        ratio = np.abs(judgement.total[:, :, :n]) / judgement.targets
        _, i, j = np.unravel_index(np.argmax(ratio), ratio.shape)
        names = surface.conductor_names[: media.n_conductors] + tuple(f"load {k + 1}" for k in range(n))
        cause = max(judgement.lines, key=lambda line: float(np.abs(judgement.lines[line][:, i, j]).max()))
        text = f"the accuracy asked was not reached: {names[i]} - {names[j]} is driven by {cause}"
        notices = [*notices, Notice("accuracy-not-reached", text)]
    return MediaSolution(
        conductor_names=surface.conductor_names[: media.n_conductors],
        maxwell=value[:, :, :n],
        maxwell_uncertainty=total[:, :, :n],
        to_infinity=value[:, :, n],
        to_infinity_uncertainty=total[:, :, n],
        budget={cause: FOUR_PI_EPSILON_0 * line[:, :, :n] for cause, line in judgement.lines.items()},
        accuracy=accuracy,
        reached=reached,
        media=media,
        panels=result.panels,
        state=FOUR_PI_EPSILON_0 * result.state.transpose(0, 2, 1),
        free=FOUR_PI_EPSILON_0 * free.transpose(0, 2, 1),
        passes=run.passes,
        method="dense LU",
        seconds=run.seconds,
        peak_memory_bytes=peak_memory(),
        warnings=notices,
        interrupted=run.interrupted,
    )
