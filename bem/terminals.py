"""Reductions of a capacitance matrix: conductors joined, earthed, left floating, measured between two terminals.

Every reduction fixes the potentials of all conductors as linear functions of those of the remaining terminals,
``V = S v``, so that the matrix seen from them is ``S^T C S``. Floating conductors carry no charge, which makes the
energy stationary in their potentials: to first order an error dC shows as ``S^T dC S``. However often a network is
reduced, the uncertainty is therefore the worst case over the entries *solved for*, not a sum of sums.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError, NumericalError
from .network import worst_case

__all__ = ["Modes", "Quantity", "Terminals", "terminals"]

FloatArray = NDArray[np.float64]

#: What the conductors that are not measured do.
OTHERS = ("floating", "earthed", "guarded")


@dataclass(frozen=True)
class Quantity:
    """A capacitance.

    Attributes
    ----------
    value, uncertainty : float, F
        Expanded uncertainty, k = 2.
    """

    value: float
    uncertainty: float


@dataclass(frozen=True)
class Modes:
    """Capacitances of a pair of terminals driven in two ways, F.

    Attributes
    ----------
    differential : Quantity
        (Q_p - Q_n) / 2 per volt between the two, driven to +1/2 V and -1/2 V.
    common : Quantity
        Q_p + Q_n per volt, both driven to 1 V.
    conversion : Quantity
        Q_p + Q_n per volt between the two, driven to +1/2 V and -1/2 V: zero for a balanced pair.
    """

    differential: Quantity
    common: Quantity
    conversion: Quantity


@dataclass(frozen=True, eq=False)
class Terminals:
    """What remains of a network of conductors; reductions return a new one.

    Attributes
    ----------
    names : tuple of str
        Of the m terminals, in order.
    states : (n, m) float
        Potential over that of infinity of each solved conductor with one terminal at 1 V and the others at 0 V.
    solved, solved_uncertainty : (n, n) float, F
        Maxwell matrix that was solved for.
    solved_row_sums : (n,) float, F, or None
        Uncertainty of its row sums.
    """

    names: tuple[str, ...]
    states: FloatArray
    solved: FloatArray
    solved_uncertainty: FloatArray
    solved_row_sums: FloatArray | None = None

    @property
    def maxwell(self) -> FloatArray:
        """Maxwell matrix seen from the terminals, (m, m) F."""
        C = self.states.T @ self.solved @ self.states
        return np.asarray(0.5 * (C + C.T))

    @property
    def uncertainty(self) -> FloatArray:
        """Expanded uncertainty of :attr:`maxwell`, (m, m) F."""
        columns = self.states.T
        spread = [[self._worst(one, other) for other in columns] for one in columns]
        return np.array(spread).reshape(len(columns), len(columns))

    @property
    def to_infinity(self) -> FloatArray:
        """Capacitance of each terminal to infinity or the reference, (m,) F."""
        return np.asarray(self.maxwell.sum(axis=1))

    @property
    def to_infinity_uncertainty(self) -> FloatArray:
        """Expanded uncertainty of :attr:`to_infinity`, (m,) F."""
        together = self.states.sum(axis=1)
        return np.array([self._worst(one, together) for one in self.states.T])

    def join(self, groups: Mapping[str, Sequence[str]]) -> "Terminals":
        """Connect terminals by a wire.

        Parameters
        ----------
        groups : mapping of str to sequence of str
            New name and the terminals that it joins; it takes the place of the first of them.

        Raises
        ------
        InputError
            If a name is unknown, used twice or taken.
        """
        target = {name: name for name in self.names}
        for new, members in groups.items():
            for member in members:
                place = self._index(member)
                if target[self.names[place]] != member:
                    raise InputError(f"terminals: {member} is joined twice; name it in one group")
                target[member] = new
        names = tuple(dict.fromkeys(target[name] for name in self.names))
        for new, members in groups.items():
            if new in self.names and new not in members:
                raise InputError(f"terminals: {new} is the name of another terminal; choose another name for the group")
        columns = [self.states[:, [target[old] == name for old in self.names]].sum(axis=1) for name in names]
        return self._with(names, np.array(columns).T)

    def earth(self, names: Sequence[str]) -> "Terminals":
        """Hold terminals at the potential of infinity (of the reference); they are no terminals any more."""
        gone = {self._index(name) for name in names}
        kept = [k for k in range(len(self.names)) if k not in gone]
        return self._with(tuple(self.names[k] for k in kept), self.states[:, kept])

    def let_float(self, names: Sequence[str]) -> "Terminals":
        """Leave terminals uncharged and unconnected; they are no terminals any more.

        Raises
        ------
        InputError
            If a name is unknown.
        NumericalError
            If their block of the matrix is not positive definite.
        """
        free = sorted({self._index(name) for name in names})
        kept = [k for k in range(len(self.names)) if k not in free]
        C = self.maxwell
        follow = -_solve_positive(C[np.ix_(free, free)], C[np.ix_(free, kept)])
        return self._with(tuple(self.names[k] for k in kept), self.states[:, kept] + self.states[:, free] @ follow)

    def refer_to(self, name: str, *, infinity: str = "floating") -> "Terminals":
        """Take a terminal as the reference of all potentials.

        Parameters
        ----------
        name : str
        infinity : {"floating", "joined"}
            "floating": far surroundings take what charge they must, as in a device that hangs free;
            "joined": infinity is at the reference's potential, as in an earthed room.

        Raises
        ------
        InputError
            If a name is unknown.
        """
        if infinity not in ("floating", "joined"):
            raise InputError(f'terminals: infinity is "floating" or "joined", not {infinity!r}')
        kept = [k for k in range(len(self.names)) if k != self._index(name)]
        names = tuple(self.names[k] for k in kept)
        if infinity == "joined":
            return self._with(names, self.states[:, kept])
        # Charge that goes nowhere else leaves the sum over all conductors zero: V_inf = sum_j q_j V_j / sum_j q_j
        # with q_j the row sums. States are potentials over that of infinity.
        together = self.states.sum(axis=1)
        pull = self.states.T @ self.solved @ together
        return self._with(names, self.states[:, kept] - np.outer(together, pull[kept] / pull.sum()))

    def between(self, one: str, other: str, *, others: str = "floating") -> Quantity:
        """Capacitance of a two-terminal measurement.

        Parameters
        ----------
        one, other : str
        others : {"floating", "earthed", "guarded"}
            "floating": everything else is unconnected, charge flows from one terminal to the other alone;
            "earthed": everything else is connected to infinity, whose current is not separated from the meter's;
            "guarded": everything else is held at the potential of infinity and its current bypasses the meter,
            which leaves the mutual capacitance.

        Raises
        ------
        InputError
            If a name is unknown, or both are the same.
        """
        if others not in OTHERS:
            raise InputError(f"terminals: others is one of {', '.join(OTHERS)}, not {others!r}")
        i, j = self._index(one), self._index(other)
        if i == j:
            raise InputError(f"terminals: {one} and {other} are the same terminal; name two")
        if others == "guarded":
            return Quantity(-float(self.maxwell[i, j]), self._worst(self.states[:, i], self.states[:, j]))
        rest = [name for name in self.names if name not in (one, other)]
        pair = self.let_float(rest) if others == "floating" else self.earth(rest)
        # One volt between them and no charge in all: the potentials divide as two capacitances in series through
        # infinity. A shielded pair has none (within its uncertainty), and then any division will do.
        first, second = (max(float(pair.maxwell[pair._index(name)].sum()), 0.0) for name in (one, other))
        share = second / (first + second) if first + second > 0.0 else 0.5
        state = share * pair.states[:, pair._index(one)] - (1.0 - share) * pair.states[:, pair._index(other)]
        return Quantity(float(state @ self.solved @ state), self._worst(state, state))

    def modes(self, positive: str, negative: str, *, others: str = "earthed") -> Modes:
        """Differential and common mode of a pair of terminals.

        Parameters
        ----------
        positive, negative : str
        others : {"floating", "earthed"}

        Raises
        ------
        InputError
            If a name is unknown, or both are the same.
        """
        if others not in OTHERS[:2]:
            raise InputError(f"terminals: others is floating or earthed, not {others!r}")
        if self._index(positive) == self._index(negative):
            raise InputError(f"terminals: {positive} and {negative} are the same terminal; name two")
        rest = [name for name in self.names if name not in (positive, negative)]
        pair = self.let_float(rest) if others == "floating" else self.earth(rest)
        plus, minus = pair.states[:, pair._index(positive)], pair.states[:, pair._index(negative)]
        difference, both = 0.5 * (plus - minus), plus + minus

        def quantity(left: FloatArray, right: FloatArray) -> Quantity:
            return Quantity(float(left @ self.solved @ right), self._worst(left, right))

        return Modes(quantity(difference, difference), quantity(both, both), quantity(both, difference))

    def elastance(self) -> tuple[FloatArray, FloatArray]:
        """Potential coefficients P of V = P Q, and their expanded uncertainty.

        Returns
        -------
        value, uncertainty : (m, m) float, 1/F

        Raises
        ------
        NumericalError
            If the matrix is not positive definite.
        """
        P = _solve_positive(self.maxwell, np.eye(len(self.names)))
        columns = (self.states @ P).T
        spread = [[self._worst(one, other) for other in columns] for one in columns]
        return 0.5 * (P + P.T), np.array(spread)

    def _index(self, name: str) -> int:
        if name not in self.names:
            raise InputError(f"terminals: no terminal {name!r}; there are {', '.join(self.names) or 'none left'}")
        return self.names.index(name)

    def _with(self, names: tuple[str, ...], states: FloatArray) -> "Terminals":
        if not names:
            raise InputError("terminals: no terminal is left; keep at least one")
        return Terminals(names, states, self.solved, self.solved_uncertainty, self.solved_row_sums)

    def _worst(self, left: FloatArray, right: FloatArray) -> float:
        return worst_case(left, right, self.solved_uncertainty, self.solved_row_sums)


def terminals(
    names: Sequence[str],
    maxwell: ArrayLike,
    uncertainty: ArrayLike,
    *,
    to_infinity_uncertainty: ArrayLike | None = None,
) -> Terminals:
    """All conductors of a solved matrix as terminals.

    Parameters
    ----------
    names : sequence of str
    maxwell, uncertainty : (n, n) float, F
    to_infinity_uncertainty : (n,) float, F, optional
        Uncertainty of the row sums, where it is better known than the sum of those of the entries.

    Returns
    -------
    Terminals

    Raises
    ------
    InputError
        If shapes do not fit, values are not finite or names repeat.
    """
    C, limits = np.array(maxwell, dtype=np.float64), np.array(uncertainty, dtype=np.float64)
    n = len(names)
    if C.shape != (n, n) or limits.shape != (n, n) or n == 0:
        raise InputError(f"terminals: {n} names need two {n} x {n} matrices, got {C.shape} and {limits.shape}")
    if not (np.isfinite(C).all() and np.isfinite(limits).all() and (limits >= 0).all()):
        raise InputError("terminals: matrix and uncertainty must be finite, the uncertainty not negative")
    if len(set(names)) != n:
        raise InputError("terminals: two conductors have the same name")
    row_sums = None if to_infinity_uncertainty is None else np.array(to_infinity_uncertainty, dtype=np.float64)
    if row_sums is not None and row_sums.shape != (n,):
        raise InputError("terminals: to_infinity_uncertainty must hold one value per conductor")
    return Terminals(tuple(names), np.eye(n), 0.5 * (C + C.T), np.maximum(limits, limits.T), row_sums)


def _solve_positive(matrix: FloatArray, right: FloatArray) -> FloatArray:
    if len(matrix) == 0:
        return np.zeros((0, right.shape[1]))
    try:
        lower = np.linalg.cholesky(matrix)
    except np.linalg.LinAlgError:
        raise NumericalError(
            "terminals: the capacitance matrix is not positive definite within its uncertainty; "
            "ask for a better accuracy"
        ) from None
    return np.asarray(np.linalg.solve(lower.T, np.linalg.solve(lower, right)))
