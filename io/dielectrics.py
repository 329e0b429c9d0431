"""Conductors and dielectrics of a case as the surface and the media that the solver takes."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.media import METAL, Media
from daraf.bem.solution import Notice
from daraf.bem.surface import Surface

from .bodies import Body
from .case import Case
from .contacts import cavity_walls, shapes_of
from .gaps import encloses
from .media_pieces import Drawn, Piece, cut_where_media_meet
from .mirror_planes import cut_at_plane, plane_notices, without_mirror_faces
from .topology import boundary_loops, edges_of

__all__ = ["permittivities", "said", "with_dielectrics"]

FloatArray = NDArray[np.float64]


def permittivities(case: Case) -> NDArray[np.complex128]:
    """Relative permittivity of what surrounds everything and of each dielectric, (1 + n, n_states) complex.

    One state for each frequency; one without losses where no frequency is stated.
    """
    # Here, not above: the losses bring the solver, and that numba.
    from daraf.bem.losses import complex_permittivity

    content = case.content
    media = [one for _, one in content.media]
    if content.conduction:
        # duality: current for charge, conductivity for permittivity, relative to the smallest
        conductivity = np.array([one.conductivity for one in media])
        return np.asarray(conductivity / conductivity.min(), dtype=np.complex128)[:, None]
    if content.half_space:
        return np.ones((1, 1), dtype=np.complex128)
    relative = [one.relative_permittivity for one in media]
    if not content.frequencies:
        return np.array(relative, dtype=np.complex128)[:, None]
    tangents, conductivities = [one.loss_tangent for one in media], [one.conductivity for one in media]
    return complex_permittivity(relative, tangents, conductivities, content.frequencies)


def with_dielectrics(
    case: Case, bodies: Sequence[Body], owner: Sequence[int]
) -> tuple[Surface, Media, list[Notice], FloatArray]:
    """Cut conductors and dielectrics where media meet and join the pieces.

    Parameters
    ----------
    case : Case
    bodies : sequence of Body
        Mended, united and placed.
    owner : sequence of int
        Conductor of each, or the number of conductors plus that of the dielectric.

    Returns
    -------
    surface : daraf.bem Surface
        Conductors first, then one group of interfaces for each dielectric that has any.
    media : daraf.bem Media
    notices : list of Notice
    rounding : (n_bodies,) float, m

    Raises
    ------
    InputError
        If a dielectric is not closed, or a surface cannot be cut.
    """
    drawn, of = _drawn(case, bodies, owner)
    n = len(case.content.conductor)
    pieces, yielded = cut_where_media_meet(drawn)
    for plane in case.content.plane:
        pieces = without_mirror_faces(pieces, drawn, np.array(plane.point), np.array(plane.normal))
    if case.content.half_space:
        half = case.content.half_space
        pieces = cut_at_plane(pieces, np.array(half.point), np.array(half.normal))
    pieces.sort(key=lambda piece: of[piece.drawn])
    owners = [of[piece.drawn] for piece in pieces]
    group = np.unique(owners, return_inverse=True)[1].reshape(-1)
    if len(set(owners) & set(range(n))) < n:
        gone = next(c for c in range(n) if c not in owners)
        raise InputError(f"{case.label}: {said(case, gone)}: nothing of its surface lies outside other metal")
    labels = ["medium", *(entry.name for entry in case.content.dielectric)]
    vertices = [piece.vertices for piece in pieces]
    starts = np.concatenate([[0], np.cumsum([len(v) for v in vertices])])
    counts = [len(piece.triangles) for piece in pieces]
    surface = Surface(
        vertices=np.concatenate(vertices),
        triangles=np.concatenate([p.triangles + s for p, s in zip(pieces, starts[:-1], strict=True)]),
        triangle_body=np.repeat(np.arange(len(pieces)), counts),
        body_conductor=group,
        conductor_names=tuple(_name(case, c) for c in sorted(set(owners))),
        body_names=tuple(_piece_name(drawn, piece, pieces, labels) for piece in pieces),
    )
    media = Media(
        permittivities(case),
        np.array([piece.front for piece in pieces]),
        np.array([METAL if piece.back < 0 else piece.back for piece in pieces]),
        n,
        np.array([piece.drawn for piece in pieces]),
    )
    notices = [*(_yield_notice(drawn[k], lost) for k, lost in yielded), *plane_notices(case)]
    rounding = np.array([drawn[piece.drawn].body.spacing for piece in pieces])
    return surface, media, notices, rounding


def _drawn(case: Case, bodies: Sequence[Body], owner: Sequence[int]) -> tuple[list[Drawn], list[int]]:
    """Drawn bodies in order of precedence, and the owner of each."""
    n = len(case.content.conductor)
    shapes = shapes_of(bodies)
    walls = cavity_walls(shapes)
    drawn, of = [], []
    for k in sorted(range(len(bodies)), key=lambda k: owner[k]):
        if k in walls:
            continue
        shape, label = shapes[k], f"{case.label}: {said(case, owner[k])}"
        closed = shape.volume is not None and shape.volume > 0.0
        if owner[k] >= n and not closed:
            raise InputError(f"{label}: {_open(bodies[k])}; a dielectric must be a closed body: close it in CAD")
        own = tuple(bodies[w] for w, host in walls.items() if host == k)
        # a closed conductor drawn without its thickness round another one is a sheet: there is field on both sides
        hollow = (
            owner[k] < n
            and not own
            and any(
                owner[m] not in (owner[k], *range(n, n + len(case.content.dielectric))) and encloses(shape, shapes[m])
                for m in range(len(bodies))
                if m != k
            )
        )
        medium = owner[k] - n + 1 if owner[k] >= n else 0
        drawn.append(Drawn(bodies[k], own, medium, closed and not hollow, label))
        of.append(owner[k])
    return drawn, of


def _open(body: Body) -> str:
    vertex, _ = boundary_loops(body.vertices, body.triangles, edges_of(body.triangles))
    if len(vertex) == 0:
        return f"body {body.name!r} encloses no volume"
    x, y, z = body.vertices[vertex[0]]
    return f"body {body.name!r} is open, an edge without neighbour lies at ({x:.5g}, {y:.5g}, {z:.5g}) m"


def _name(case: Case, owner: int) -> str:
    content = case.content
    n = len(content.conductor)
    return content.conductor[owner].name if owner < n else content.dielectric[owner - n].name


def said(case: Case, owner: int) -> str:
    """Conductor or dielectric by name."""
    what = "conductor" if owner < len(case.content.conductor) else "dielectric"
    return f"{what} {_name(case, owner)!r}"


def _piece_name(drawn: list[Drawn], piece: Piece, pieces: list[Piece], labels: list[str]) -> str:
    name = drawn[piece.drawn].body.name
    alone = len({(other.front, other.back) for other in pieces if other.drawn == piece.drawn}) == 1
    return name if alone else f"{name} | {labels[piece.front]}"


def _yield_notice(one: Drawn, lost: float) -> Notice:
    text = (
        f"{one.label.split(': ', 1)[-1]} (body {one.body.name!r}) gives {100.0 * lost:.3g} % of its volume to what "
        "comes before it: conductors first, then the dielectrics in the order of the case"
    )
    return Notice("dielectric-yields", text)
