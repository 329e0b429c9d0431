"""What was made of the mesh as it came, body by body: flat faces, panels, and which facets were taken as round."""

import numpy as np
from numpy.typing import NDArray

from .creases import LEAST_TURN, WIDE_TURN, Creases, find_creases
from .facets import Facets
from .panels import Panels
from .regions import Regions
from .solution import BodyAccount, Notice
from .surface import Surface

__all__ = ["account_bodies", "change_notices", "facet_notices"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Triangles longer than so many of their heights are called slivers.
SLIVER = 20.0
#: Relative changes of area or volume beyond this are worth a warning: an accuracy of 1e-3 does not see smaller ones.
WORTH_A_WARNING = 1e-4
#: Round parts with fewer facets a turn than this ask for a word of the user.
FEW_FACETS = 15


def account_bodies(
    surface: Surface, regions: Regions, creases: Creases, panels: Panels, facets: Facets | None
) -> tuple[BodyAccount, ...]:
    """Tell what each body became.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    creases : Creases
    panels : Panels
        As they cover the flat regions, neither moved nor split.
    facets : Facets or None
        None where the facets are the part.

    Returns
    -------
    tuple of BodyAccount
        One for each body.
    """
    corners = surface.vertices[surface.triangles]
    area, volume = _measures(corners, surface.triangle_body, surface.n_bodies)
    fans = panels.corners[:, [0, 1, 2, 0, 2, 3]].reshape(-1, 3, 3)
    area_now, volume_now = _measures(fans, np.repeat(panels.body, 2), surface.n_bodies)
    sides = np.linalg.norm(np.roll(corners, -1, axis=1) - corners, axis=2).max(axis=1)
    doubled = np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1)
    sliver = doubled * SLIVER < sides**2
    # a closed body without thickness has no volume to compare
    solid = _closed(surface, creases) & (np.abs(volume) > 1e-9 * area**1.5)
    is_round = np.zeros(len(regions), bool) if facets is None else facets.offset != 0.0
    turns = _smooth_turns(surface, regions, creases, is_round)
    outlines, holes, rim_turns = _round_rims(surface, regions, facets)
    accounts = []
    for body in range(surface.n_bodies):
        own = surface.triangle_body == body
        faces = regions.body == body
        accounts.append(
            BodyAccount(
                body=surface.body_names[body],
                triangles=int(np.count_nonzero(own)),
                slivers=int(np.count_nonzero(own & sliver)),
                faces=int(np.count_nonzero(faces)),
                panels=int(np.count_nonzero(panels.body == body)),
                area_change=float(area_now[body] / area[body] - 1.0) if area[body] > 0.0 else 0.0,
                volume_change=float(volume_now[body] / volume[body] - 1.0) if solid[body] else None,
                # faces that turn by less than can be told are flat
                round_faces=0 if turns[body] is None else int(np.count_nonzero(faces & is_round)),
                turn=turns[body],
                round_outline=int(outlines[body]),
                round_holes=int(holes[body]),
                rim_turn=rim_turns[body],
            )
        )
    return tuple(accounts)


def _measures(corners: FloatArray, body: IntArray, n_bodies: int) -> tuple[FloatArray, FloatArray]:
    """Area and enclosed volume of each body, (n_bodies,) m2 and m3; the volume about a point of the body."""
    about = np.zeros((n_bodies, 3))
    about[body[::-1]] = corners[::-1, 0]
    corners = corners - about[body][:, None]
    vectors = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    area, volume = np.zeros(n_bodies), np.zeros(n_bodies)
    np.add.at(area, body, 0.5 * np.linalg.norm(vectors, axis=1))
    np.add.at(volume, body, np.einsum("ni,ni->n", corners[:, 0], vectors) / 6.0)
    return area, volume


def _closed(surface: Surface, creases: Creases) -> BoolArray:
    """Whether each body has neither rim nor branching edge."""
    open_edge = ~creases.edges.consistent
    closed = np.ones(surface.n_bodies, bool)
    closed[surface.triangle_body[creases.edges.triangles[open_edge].max(axis=1)]] = False
    return closed


def _smooth_turns(
    surface: Surface, regions: Regions, creases: Creases, is_round: BoolArray
) -> list[tuple[float, float] | None]:
    """Least and greatest turn of each body's edges taken as smooth between round facets, rad."""
    sides = regions.triangle_region[creases.edges.triangles]
    turn = np.abs(creases.angles)
    smooth = np.flatnonzero(creases.smooth & creases.between & (turn > LEAST_TURN) & is_round[sides].any(axis=1))
    body = regions.body[sides[smooth, 0]]
    return [
        (float(turn[smooth][body == k].min()), float(turn[smooth][body == k].max())) if (body == k).any() else None
        for k in range(surface.n_bodies)
    ]


def _round_rims(
    surface: Surface, regions: Regions, facets: Facets | None
) -> tuple[IntArray, IntArray, list[tuple[float, float] | None]]:
    """Edges of each body that stand for round outlines and round holes, and their least and greatest turn, rad."""
    nothing = np.zeros(surface.n_bodies, np.int64)
    if facets is None or not len(facets.edge_offset):
        return nothing, nothing, [None] * surface.n_bodies
    length = np.linalg.norm(facets.edge_ends[:, 1] - facets.edge_ends[:, 0], axis=1)
    # an arc over a chord c that turns by t bulges by c t / 12 on average
    turn = 12.0 * facets.edge_offset / length
    body = regions.body[facets.edge_region]
    bent = np.abs(turn) > LEAST_TURN
    outward, inward = bent & (turn > 0), bent & (turn < 0)
    turns: list[tuple[float, float] | None] = []
    for k in range(surface.n_bodies):
        own = np.abs(turn[bent & (body == k)])
        turns.append((float(own.min()), float(own.max())) if len(own) else None)
    return (
        np.bincount(body[outward], minlength=surface.n_bodies),
        np.bincount(body[inward], minlength=surface.n_bodies),
        turns,
    )


def change_notices(accounts: tuple[BodyAccount, ...]) -> list[Notice]:
    """Warn of bodies whose area or volume changed when their flat faces were covered anew."""
    notices = []
    for one in accounts:
        changes = {"area": one.area_change, "volume": one.volume_change or 0.0}
        told = [f"{what} by {change:+.1e}" for what, change in changes.items() if abs(change) > WORTH_A_WARNING]
        if told:
            text = (
                f"{one.body}: covering its {one.faces} flat faces anew changed its {' and its '.join(told)} of itself; "
                "look at its faults with inspect, and export it with more digits"
            )
            notices.append(Notice("area-changed", text))
    return notices


def facet_notices(
    surface: Surface, regions: Regions, creases: Creases, accounts: tuple[BodyAccount, ...], meaning: str
) -> list[Notice]:
    """Warn where it is a matter of opinion what the facets mean.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    creases : Creases
    accounts : tuple of BodyAccount
    meaning : str
        From :func:`daraf.bem.facets.facet_meaning`; only "auto" has doubts.

    Returns
    -------
    list of Notice
    """
    if meaning != "auto":
        return []
    limit = 2.0 * np.pi / FEW_FACETS
    greatest = {
        one.body: max(pair[1] for pair in (one.turn, one.rim_turn, (0.0, 0.0)) if pair is not None) for one in accounts
    }
    notices = []
    steep = {body: turn for body, turn in greatest.items() if turn > limit}
    if steep:
        text = (
            f"edges that turn by up to {np.degrees(max(steep.values())):.0f} degrees were taken as round "
            f'({_listed(list(steep))}); if the facets are the part, say facets = "as drawn"'
        )
        notices.append(Notice("facets-taken-round", text))
    doubtful = creases.between & (np.abs(creases.angles) >= creases.greatest_turn)
    doubtful &= np.abs(creases.angles) < WIDE_TURN
    if doubtful.any():
        wide = find_creases(surface, regions, edges=creases.edges, greatest_turn=WIDE_TURN)
        taken = np.flatnonzero(wide.smooth & doubtful)
        names = [surface.body_names[k] for k in np.unique(surface.triangle_body[creases.edges.triangles[taken, 0]])]
        if names:
            text = (
                f"facets in rows that turn by {np.degrees(np.abs(creases.angles[taken]).max()):.0f} degrees were taken "
                f'as drawn ({_listed(names)}); if they stand for a round part, say facets = "round"'
            )
            notices.append(Notice("facets-taken-as-drawn", text))
    return notices


def _listed(names: list[str]) -> str:
    return ", ".join(names[:6]) + (f" and {len(names) - 6} more" if len(names) > 6 else "")
