"""The Galerkin matrix of the single-layer potential as an operator: near blocks and fast multipole method."""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .frames import panel_frames
from .jit import kernel
from .multipole import FarField
from .multipole_lists import CellPairs, cell_pairs
from .multipole_parts import part_sums
from .multipole_points import point_sums
from .near import self_integral
from .near_blocks import Known, NearBlocks, NearLayout, near_layout
from .pairs import pair_integral
from .panels import polygon_geometry
from .threads import one_blas_thread
from .translations import n_coefficients
from .tree import Tree, build_tree

__all__ = ["Expansion", "FastOperator", "OperatorPlan", "Settings", "plan_operator", "settings_for"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[float, float], None]

#: Below this tolerance all is stored in double precision: single precision ends at 2.5e-7.
_SINGLE = 1e-6
#: From this tolerance on the rules of close pairs may leave 1e-5 of each.
_COARSE = 5e-6
#: Panels of a leaf that are tried.
_LEAF_SIZES = (32, 64, 128)
#: Cost of translating from one cell to one other, and of each product in it, over that of a near entry: bytes read
#: in a product, and its integral shared by thirty products.
_PAIR_COST, _PRODUCT_COST = 60.0, 0.025
#: Sources of one block of the direct sums of a check: their packed geometry is large.
_DIRECT_BLOCK = 20_000


@dataclass(frozen=True)
class Settings:
    """What follows from the tolerance.

    Attributes
    ----------
    degree : int
        Of the expansions.
    theta : float
        Largest sum of the radii of two cells over their distance, for an expansion to serve.
    dropped : float
        What the translation of one pair may leave out, relative, root mean square.
    expand_beyond : float
        Distance over the sum of the radii beyond which a near pair takes the first terms of its expansion.
    half_beyond : float
        Likewise for the expansion of the smaller panel alone.
    gauss_beyond : float
        Likewise for three by three points on both panels.
    real : type
        Precision of what is stored.
    """

    degree: int
    theta: float
    dropped: float
    expand_beyond: float
    half_beyond: float
    gauss_beyond: float
    real: type


def settings_for(tolerance: float) -> Settings:
    """Settings that keep the relative error of a product, in the root mean square, below a tolerance.

    Two and a half degrees gain one digit: measured on spheres, plates,
    tubes and graded plates (tests/bem/test_operator.py).
    """
    degree = int(np.clip(np.ceil(7.6 - 2.5 * np.log10(tolerance / 1e-5)), 3, 18))
    expand_beyond = max(3.2, 5.8 * (tolerance / 1e-5) ** -0.28)
    half_beyond = max(2.5, 3.5 * (tolerance / 1e-5) ** -0.25)
    gauss_beyond = max(1.8, 2.0 * (tolerance / 1e-5) ** -0.17)
    real = np.float32 if tolerance >= _SINGLE else np.float64
    return Settings(degree, 0.7, 6.0 * tolerance, expand_beyond, half_beyond, gauss_beyond, real)


@dataclass(frozen=True, eq=False)
class OperatorPlan:
    """Tree and lists of an operator: all that its memory depends on, before any integral is computed.

    Attributes
    ----------
    settings : Settings
    tree : Tree
    pairs : CellPairs
    layout : NearLayout
    far : FarField
        With its translations; the moments of the panels are not made yet.
    """

    settings: Settings
    tree: Tree
    pairs: CellPairs
    layout: NearLayout
    far: FarField

    @property
    def near_entries(self) -> int:
        """Integrals stored."""
        return int(self.layout.start[-1])

    @property
    def bytes(self) -> int:
        """Memory that the operator will hold, bytes."""
        n, real = len(self.tree.order), np.dtype(self.settings.real).itemsize
        size = n_coefficients(self.settings.degree)
        near = self.near_entries * real + 32 * len(self.layout.pairs) + 24 * len(self.tree.leaves)
        far = (n * size + len(self.far.translations[0])) * real + (40 + 2 * real) * len(self.pairs.far)
        return int(near + far + n * (2 * 96 + 8))

    def working_bytes(self, n_columns: int) -> int:
        """Memory that a product takes besides, bytes."""
        real = np.dtype(self.settings.real).itemsize
        cells = 2 * len(self.tree.level) * n_coefficients(self.settings.degree)
        return int(n_columns * real * (cells + self.layout.rows + 3 * len(self.tree.order)))


def plan_operator(corners: FloatArray, tolerance: float = 1e-5, *, leaf_size: int | None = None) -> OperatorPlan:
    """Tree and lists for panels.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
    tolerance : float
    leaf_size : int, optional
        Panels of a leaf; chosen by the predicted cost if omitted.
    """
    settings = settings_for(tolerance)
    sizes = _LEAF_SIZES if leaf_size is None else (leaf_size,)
    cost, tree, pairs = math.inf, None, None
    for size in sizes:
        its_tree = build_tree(corners, size)
        its_pairs = cell_pairs(its_tree, settings.theta)
        its_cost = _predicted_cost(its_tree, its_pairs, settings)
        if its_cost < cost:
            cost, tree, pairs = its_cost, its_tree, its_pairs
    assert tree is not None
    assert pairs is not None
    unit = np.ascontiguousarray((corners - tree.origin) / tree.scale)
    far = FarField(tree, pairs, unit, settings.degree, settings.dropped, settings.real)
    return OperatorPlan(settings, tree, pairs, near_layout(tree, pairs), far)


def _predicted_cost(tree: Tree, pairs: CellPairs, settings: Settings) -> float:
    """Predicted time of a product and its share of the assembly, in units of one near entry."""
    size = np.diff(tree.leaf_start)
    near = float((size[pairs.near[:, 0]] * size[pairs.near[:, 1]]).sum())
    # offsets further away keep fewer coefficients: half of the products on the average
    return near + 2.0 * len(pairs.far) * (_PAIR_COST + _PRODUCT_COST * n_coefficients(settings.degree) ** 2)


@dataclass(frozen=True, eq=False)
class Expansion:
    """What a charge density does, kept to be read in several places.

    Attributes
    ----------
    density : (n, n_columns) float
        In the panels' own order.
    multipoles, locals : (n_cells, n_columns, n_coefficients) float
        For unit columns: of charges divided by `largest`.
    largest : (n_columns,) float
    """

    density: FloatArray
    multipoles: NDArray[np.floating]
    locals: NDArray[np.floating]
    largest: FloatArray


class FastOperator:
    """The matrix ``A_ij = int_i int_j dS dS / r`` (m3) of :func:`daraf.bem.galerkin.galerkin_matrix`, as an operator.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        Flat panels; a triangle repeats its third corner.
    tolerance : float
        Relative error of a product in the root mean square, for charges of random sign.
    plan : OperatorPlan, optional
        Of these panels, where it was made beforehand to look at ``plan.bytes``.
    previous : FastOperator, optional
        Operator of an earlier geometry in the same place, whose near integrals are taken over.
    known : (n,) int, optional
        With `previous`: the panel there that each panel is, -1 for a new one.
    progress : callable, optional
        Told (near integrals done, in all).

    Attributes
    ----------
    shape : (int, int)
    tolerance : float
    plan : OperatorPlan
    bytes : int
        Memory held.
    diagonal : (n,) float, m3
        Self integrals.
    areas : (n,) float, m2

    Notes
    -----
    ``apply(density)`` is the product with (n,) or (n, n_columns). ``leaves`` and ``leaf_block`` are for a
    preconditioner: panels of each leaf and the block of A among them. ``expand(density)`` keeps the expansions of a
    density for ``at_parts`` and ``at_points``, which also take the density itself. ``check(density)`` compares with
    direct sums. Results do not depend on the number of threads.
    """

    def __init__(
        self,
        corners: FloatArray,
        tolerance: float = 1e-5,
        *,
        plan: OperatorPlan | None = None,
        previous: "FastOperator | None" = None,
        known: IntArray | None = None,
        progress: Progress | None = None,
    ) -> None:
        self.tolerance = tolerance
        self.plan = plan_operator(corners, tolerance) if plan is None else plan
        self.corners = np.ascontiguousarray(corners, dtype=np.float64)
        self.areas: FloatArray = polygon_geometry(self.corners)[0]
        settings, tree = self.plan.settings, self.plan.tree
        self.far = self.plan.far
        with one_blas_thread():
            self.far.prepare()
            old = None if previous is None or known is None else Known(previous.near, known)
            coarse = float(tolerance >= _SINGLE) + float(tolerance >= _COARSE)
            rules = (settings.expand_beyond, settings.half_beyond, settings.gauss_beyond, coarse)
            self.near: NearBlocks = NearBlocks(
                tree,
                self.plan.layout,
                self.far.corners,
                rules,
                settings.real,
                old,
                progress,
            )

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns of the matrix."""
        return len(self.corners), len(self.corners)

    @property
    def bytes(self) -> int:
        """Memory held, bytes."""
        layout = self.plan.layout
        held = [
            layout.pairs,
            layout.column,
            layout.place,
            layout.start,
            layout.head,
            layout.extra,
            self.corners,
            self.areas,
            self.plan.pairs.far,
        ]
        return self.near.bytes + self.far.bytes + sum(int(a.nbytes) for a in held)

    @property
    def leaves(self) -> list[IntArray]:
        """Panels of each leaf."""
        tree = self.plan.tree
        return np.split(tree.order, tree.leaf_start[1:-1])

    def leaf_block(self, leaf: int) -> FloatArray:
        """Block of A among the panels of a leaf, m3, in the order of ``leaves[leaf]``."""
        tree = self.plan.tree
        areas = self.areas[tree.order[tree.leaf_start[leaf] : tree.leaf_start[leaf + 1]]]
        block = self.near.leaf_block(leaf).astype(np.float64)
        return block * (areas[:, None] * areas[None, :] / tree.scale)

    @property
    def diagonal(self) -> FloatArray:
        """Self integrals, (n,) m3."""
        result = np.empty(len(self.areas))
        for leaf, panels in enumerate(self.leaves):
            result[panels] = np.diag(self.near.leaf_block(leaf))
        return result * self.areas**2 / self.plan.tree.scale

    def apply(self, density: FloatArray) -> FloatArray:
        """Product ``A @ density``.

        Parameters
        ----------
        density : (n,) or (n, n_columns) float

        Returns
        -------
        float, of the same shape
        """
        columns = density.reshape(len(density), -1)
        tree = self.plan.tree
        charges, largest = self._charges(columns)
        with one_blas_thread():
            sums = self.near.multiply(charges)
            self.far.add_means(self.far.locals(self.far.multipoles(charges)), sums)
        result = np.empty(columns.shape)
        result[tree.order] = sums[: len(columns)]
        result *= (self.areas / tree.scale)[:, None] * largest[None, :]
        return result.reshape(density.shape)

    def __matmul__(self, density: FloatArray) -> FloatArray:
        return self.apply(density)

    def _charges(self, columns: FloatArray) -> tuple[NDArray[np.floating], FloatArray]:
        """Charges in the tree's order, (n, n_columns), divided by the largest of each column."""
        charges = columns[self.plan.tree.order] * self.areas[self.plan.tree.order, None]
        largest = np.abs(charges).max(axis=0)
        largest[largest == 0.0] = 1.0
        return np.ascontiguousarray(charges / largest, dtype=self.plan.settings.real), largest

    def expand(self, density: FloatArray) -> Expansion:
        """Expansions of a density (n, n_columns), to be read by `at_parts` and `at_points`."""
        columns = np.ascontiguousarray(density.reshape(len(density), -1), dtype=np.float64)
        charges, largest = self._charges(columns)
        with one_blas_thread():
            multipoles = self.far.multipoles(charges)
            return Expansion(columns, multipoles, self.far.locals(multipoles), largest)

    def at_parts(
        self, parts: FloatArray, density: "FloatArray | Expansion", panels: IntArray | None = None
    ) -> FloatArray:
        """Integrals of the potential over the parts of panels.

        Parameters
        ----------
        parts : (m, 4, FRAME_SIZE) float
            Parts of each panel, in the coordinates of `corners`; one without area is passed over.
        density : (n, n_columns) float or Expansion
        panels : (m,) int, optional
            Panels that the parts belong to; all in their order if omitted.

        Returns
        -------
        (m, 4, n_columns) float, m3
            ``sum_j density_j int_part int_j dS dS / r``. Near panels by the coarser rules of
            :mod:`daraf.bem.indicator`: 1e-2 of a moment's variation over the panel.
        """
        expansion = density if isinstance(density, Expansion) else self.expand(density)
        chosen = np.arange(len(parts)) if panels is None else np.asarray(panels, dtype=np.int64)
        return part_sums(self.far, self.plan.layout, self.corners, parts, chosen, expansion)

    def at_points(self, points: FloatArray, density: "FloatArray | Expansion") -> tuple[FloatArray, FloatArray]:
        """Potential and its gradient at points, on or off the panels.

        Parameters
        ----------
        points : (m, 3) float, m
        density : (n, n_columns) float or Expansion

        Returns
        -------
        potential : (m, n_columns) float, m
            ``sum_j density_j int_j dS / r``.
        gradient : (m, n_columns, 3) float
            On a panel the mean of its two sides.
        """
        expansion = density if isinstance(density, Expansion) else self.expand(density)
        return point_sums(self.far, self.corners, points, expansion, self.tolerance)

    def check(self, density: FloatArray, n_targets: int = 50, seed: int = 0) -> float:
        """Relative error of the product, root mean square, against direct sums on sampled panels.

        Parameters
        ----------
        density : (n, n_columns) float
        n_targets, seed : int
        """
        columns = density.reshape(len(density), -1)
        chosen = np.random.default_rng(seed).choice(len(columns), min(n_targets, len(columns)), replace=False)
        return self.error_at(chosen, columns, self.apply(columns))

    def error_at(self, targets: IntArray, density: FloatArray, product: FloatArray) -> float:
        """Relative error of ``product = apply(density)`` at some panels against direct sums."""
        exact, over = self.direct_rows(targets, density), self.areas[targets, None]
        scale = np.sqrt(((exact / over) ** 2).sum(axis=0))
        return float(np.max(np.sqrt((((product[targets] - exact) / over) ** 2).sum(axis=0)) / scale))

    def direct_rows(self, targets: IntArray, density: FloatArray) -> FloatArray:
        """Rows of ``A @ density`` by direct sums over all panels, (n_targets, n_columns)."""
        origin, chosen = self.plan.tree.origin, np.asarray(targets, dtype=np.int64)
        frames = panel_frames(self.corners[chosen] - origin)
        exact = np.zeros((len(chosen), density.shape[1]))
        for first in range(0, len(density), _DIRECT_BLOCK):
            here = slice(first, first + _DIRECT_BLOCK)
            sources = panel_frames(self.corners[here] - origin)
            _direct_rows(frames, chosen - first, sources, np.ascontiguousarray(density[here]), exact)
        return exact


@kernel
def _direct_rows(targets, panels, sources, density, result):
    """Add a block of sources to rows of the product; `panels` are the places of the targets in that block."""
    for t in range(len(targets)):
        for j in range(len(sources)):
            value = self_integral(sources[j]) if panels[t] == j else pair_integral(targets[t], sources[j])
            for c in range(density.shape[1]):
                result[t, c] += value * density[j, c]
