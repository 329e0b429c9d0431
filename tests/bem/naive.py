"""Slow, obvious twins of the kernels: the oracles of these tests.

Nothing here is shared with the code under test but the way corners are written: (4, 3), counter-clockwise, a
triangle repeats its third corner.
"""

import math

import mpmath
import numpy as np

__all__ = [
    "bilinear",
    "brute_field",
    "brute_potential",
    "matrix",
    "pair_integral",
    "parallel_rectangles",
    "potential",
    "potential_mp",
    "rectangle",
    "self_rectangle",
    "self_triangle",
    "sub_quad",
    "triangle",
]

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(10)
_NODES, _WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS


def rectangle(x, y, *, at=(0.0, 0.0, 0.0)):
    """Rectangle with one corner at `at`, sides x and y along the axes."""
    return np.array([(0, 0, 0), (x, 0, 0), (x, y, 0), (0, y, 0)], dtype=np.float64) + np.array(at)


def triangle(a, b, c):
    return np.array([a, b, c, c], dtype=np.float64)


def bilinear(corners, u, v):
    """Points (..., 3) of the bilinear map of the unit square onto a panel and the areas it sweeps."""
    a, b, c, d = corners
    u, v = np.asarray(u)[..., None], np.asarray(v)[..., None]
    points = (1 - u) * (1 - v) * a + u * (1 - v) * b + u * v * c + (1 - u) * v * d
    along = (1 - v) * (b - a) + v * (c - d)
    across = (1 - u) * (d - a) + u * (c - b)
    return points, np.linalg.norm(np.cross(along, across), axis=-1)


def sub_quad(corners, u0, u1, v0, v1):
    """Part of a panel, as its bilinear map cuts it."""
    return bilinear(corners, [u0, u1, u1, u0], [v0, v0, v1, v1])[0]


def _edges(corners):
    for k in range(4):
        a, b = corners[k], corners[(k + 1) % 4]
        length = np.linalg.norm(b - a)
        if length > 0:
            yield a, b, (b - a) / length


def _unit_normal(corners):
    a, b, c, d = corners
    normal = np.cross(b - a, c - a) + np.cross(c - a, d - a)
    return normal / np.linalg.norm(normal)


def potential(corners, points):
    """Potential of a flat panel at points (..., 3), edge by edge in the plane's own coordinates.

    The form with inverse hyperbolic sines and one arctangent per end of an edge; an edge whose line passes
    through the point's projection adds nothing.
    """
    normal = _unit_normal(corners)
    points = np.asarray(points)
    h = np.abs((points - corners[0]) @ normal)
    total = np.zeros(points.shape[:-1])
    for a, b, along in _edges(corners):
        outward = np.cross(along, normal)
        t = (a - points) @ outward
        l0, l1 = (a - points) @ along, (b - points) @ along
        p = np.hypot(t, h)
        safe = np.where(p > 0, p, 1.0)
        logs = np.where(t != 0, t * (np.arcsinh(l1 / safe) - np.arcsinh(l0 / safe)), 0.0)
        r0, r1 = np.hypot(p, l0), np.hypot(p, l1)
        flat = t == 0
        tt = np.where(flat, 1.0, t)
        # atan(l/t) - atan(l h / (t R)) = the angle seen, less what the height takes away
        turn = np.arctan(l1 / tt) - np.arctan(l0 / tt)
        turn -= np.arctan(l1 * h / (tt * np.where(r1 > 0, r1, 1.0))) - np.arctan(
            l0 * h / (tt * np.where(r0 > 0, r0, 1.0))
        )
        total += logs - np.where(flat, 0.0, h * turn)
    return total


def potential_mp(corners, point, digits=40):
    """Potential of a flat panel at one point, in `digits` digits, by polar coordinates about its projection.

    ``V = sum_e int (sqrt(rho^2 + h^2) - |h|) dtheta`` over the angle that each edge spans; with
    ``l = |t| sinh u`` along the edge the integrand is smooth on a scale of one and Gauss-Legendre converges.
    """
    with mpmath.workdps(digits):
        mp = mpmath.mpf
        exact = [[mp(float(x)) for x in corner] for corner in corners]
        x = [mp(float(v)) for v in point]

        def minus(p, q):
            return [i - j for i, j in zip(p, q, strict=True)]

        def dot(p, q):
            return sum(i * j for i, j in zip(p, q, strict=True))

        def cross(p, q):
            return [p[1] * q[2] - p[2] * q[1], p[2] * q[0] - p[0] * q[2], p[0] * q[1] - p[1] * q[0]]

        def unit(p):
            size = mpmath.sqrt(dot(p, p))
            return [i / size for i in p]

        first = cross(minus(exact[1], exact[0]), minus(exact[2], exact[0]))
        second = cross(minus(exact[2], exact[0]), minus(exact[3], exact[0]))
        normal = unit([i + j for i, j in zip(first, second, strict=True)])
        h = abs(dot(minus(x, exact[0]), normal))
        total = mp(0)
        for k in range(4):
            a, b = exact[k], exact[(k + 1) % 4]
            if a == b:
                continue
            along = unit(minus(b, a))
            t = dot(minus(a, x), cross(along, normal))
            size = abs(t)
            if size < mp(10) ** (5 - digits):
                continue
            l0, l1 = dot(minus(a, x), along), dot(minus(b, x), along)
            u0, u1 = mpmath.asinh(l0 / size), mpmath.asinh(l1 / size)

            def integrand(u, size=size):
                c = mpmath.cosh(u)
                return (mpmath.sqrt((size * c) ** 2 + h**2) - h) / c

            pieces = max(1, int(u1 - u0))
            total += mpmath.sign(t) * mpmath.quad(
                integrand, mpmath.linspace(u0, u1, pieces + 1), method="gauss-legendre"
            )
        return float(total)


def brute_potential(corners, point, n=200):
    """Potential by a composite product rule, for points well off the panel."""
    points, weights = _composite(corners, n)
    return float(np.sum(weights / np.linalg.norm(points - point, axis=-1)))


def brute_field(corners, point, n=200):
    """Integral of (x - y)/r^3 by a composite product rule, for points well off the panel."""
    points, weights = _composite(corners, n)
    away = np.asarray(point) - points
    return np.einsum("n,ni->i", weights / np.linalg.norm(away, axis=1) ** 3, away)


def _composite(corners, n):
    start = np.arange(n // 10) / (n // 10)
    nodes = (start[:, None] + _NODES / (n // 10)).ravel()
    weights = np.tile(_WEIGHTS / (n // 10), n // 10)
    u, v = (grid.ravel() for grid in np.meshgrid(nodes, nodes, indexing="ij"))
    points, swept = bilinear(corners, u, v)
    return points, swept * np.outer(weights, weights).ravel()


def pair_integral(outer, inner, *, tol=1e-10, most=400_000):
    """Integral of 1/r over two panels: `potential` of `inner` by adaptive bisection of `outer`.

    Each cell of the unit square is compared with its halves either way and cut where they differ more.

    Raises
    ------
    AssertionError
        If the tolerance, relative, is not met with `most` cells.
    """
    cells = np.array([(0.0, 1.0, 0.0, 1.0)])
    done, used, scale = [], 0, None
    while len(cells):
        used += len(cells)
        assert used < most, "the oracle itself did not converge"
        whole = _cell_values(outer, inner, cells)
        by_u = _halves(cells, 0)
        by_v = _halves(cells, 2)
        in_u = _cell_values(outer, inner, by_u).reshape(-1, 2).sum(axis=1)
        in_v = _cell_values(outer, inner, by_v).reshape(-1, 2).sum(axis=1)
        if scale is None:
            scale = abs(whole.sum())
        error_u, error_v = np.abs(in_u - whole), np.abs(in_v - whole)
        size = np.minimum(cells[:, 1] - cells[:, 0], cells[:, 3] - cells[:, 2])
        fine = (np.maximum(error_u, error_v) < 0.02 * tol * scale) | (size < 1e-15)
        done.append(math.fsum(np.where(error_u > error_v, in_u, in_v)[fine]))
        along_u = ~fine & (error_u >= error_v)
        along_v = ~fine & ~along_u
        cells = np.concatenate([_halves(cells[along_u], 0), _halves(cells[along_v], 2)])
    return math.fsum(done)


def _halves(cells, at):
    low, high = cells.copy(), cells.copy()
    middle = 0.5 * (cells[:, at] + cells[:, at + 1])
    low[:, at + 1] = high[:, at] = middle
    return np.stack([low, high], axis=1).reshape(-1, 4)


def _cell_values(outer, inner, cells):
    u = cells[:, 0, None] + (cells[:, 1] - cells[:, 0])[:, None] * _NODES
    v = cells[:, 2, None] + (cells[:, 3] - cells[:, 2])[:, None] * _NODES
    points, swept = bilinear(outer, u[:, :, None], v[:, None, :])
    values = potential(inner, points) * swept
    area = (cells[:, 1] - cells[:, 0]) * (cells[:, 3] - cells[:, 2])
    return area * np.einsum("nij,i,j->n", values, _WEIGHTS, _WEIGHTS)


def parallel_rectangles(first, second, z, digits=60):
    """Integral of 1/r over two rectangles with parallel sides, (x0, x1, y0, y1) each, a height z apart.

    Differences of the fourfold primitive of 1/r, E. B. Rosa and F. W. Grover's double integrals in Cartesian
    form (from memory); exact but for cancellation, hence the many digits.
    """
    with mpmath.workdps(digits):
        mp = mpmath.mpf
        x0, x1, y0, y1 = (mp(float(v)) for v in first)
        p0, p1, q0, q1 = (mp(float(v)) for v in second)
        h = abs(mp(float(z)))

        def primitive(x, y):
            r = mpmath.sqrt(x * x + y * y + h * h)
            value = -(x * x - 2 * h * h + y * y) * r / 6
            if y + r > 0 and y != 0:
                value += (x * x - h * h) * y / 2 * _log_sum(y, r, x * x + h * h)
            if x + r > 0 and x != 0:
                value += (y * y - h * h) * x / 2 * _log_sum(x, r, y * y + h * h)
            if h > 0:
                value -= x * y * h * mpmath.atan(x * y / (h * r))
            return value

        total = mp(0)
        for i, x in ((1, x1), (-1, x0)):
            for k, p in ((1, p1), (-1, p0)):
                for j, y in ((1, y1), (-1, y0)):
                    for m, q in ((1, q1), (-1, q0)):
                        total += i * j * k * m * primitive(x - p, y - q)
        return float(total)


def _log_sum(y, r, rest):
    """ln(y + r), r^2 = y^2 + rest, without cancellation for negative y."""
    if y >= 0:
        return mpmath.log(y + r)
    return mpmath.log(rest) - mpmath.log(r - y)


def self_rectangle(a, b):
    """Integral of 1/r over a rectangle with itself."""
    return parallel_rectangles((0, a, 0, b), (0, a, 0, b), 0.0)


def self_triangle(corners, digits=60):
    """Integral of 1/r over a triangle with itself: ``4 A^2/3 sum_k ln(s/(s - l_k)) / l_k``, s half the girth.

    Eibert and Hansen, IEEE Trans. Antennas Propag. 43 (1995) 1499 (from memory).
    """
    with mpmath.workdps(digits):
        p = [[mpmath.mpf(float(x)) for x in corner] for corner in corners[:3]]
        sides = [mpmath.sqrt(sum((p[k][m] - p[(k + 1) % 3][m]) ** 2 for m in range(3))) for k in range(3)]
        s = sum(sides) / 2
        area2 = s * (s - sides[0]) * (s - sides[1]) * (s - sides[2])
        return float(4 * area2 / 3 * sum(mpmath.log(s / (s - side)) / side for side in sides))


def matrix(corners, pair, self_term):
    """Lower triangle of the Galerkin matrix by two plain loops."""
    n = len(corners)
    values = np.zeros((n, n))
    for i in range(n):
        for j in range(i):
            values[i, j] = pair(corners[i], corners[j])
        values[i, i] = self_term(corners[i])
    return values
