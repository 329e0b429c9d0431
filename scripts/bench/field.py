"""Points per second of potential and field off the surfaces, against direct sums and a fast multipole library.

All in one run on one thread: the closed-form evaluation of this project, a plain numpy sum over point charges in the
centroids, and, where it is installed (`pip install fmm3dpy`), the fast multipole sum over the same point charges at
the error of the closed form there. Point charges are right only for points some panel sizes away, which these are:
on a sphere of twice the radius. Bound by square roots and divisions of pairs: 1 to 2 ns each.

Usage: python scripts/bench/field.py [subdivisions of a sphere, default 4] [points, default 10000]
"""

import os
import sys
import time

os.environ.setdefault("NUMBA_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
import trimesh

from daraf.bem.off_surface import PanelSum

BLOCK = 200


def centroid_sum(points, centroids, charges):
    """Potential and field of point charges, in blocks of targets."""
    potential, field = np.empty(len(points)), np.empty((len(points), 3))
    for first in range(0, len(points), BLOCK):
        here = slice(first, first + BLOCK)
        r = points[here, None, :] - centroids
        inverse = 1.0 / np.sqrt(np.einsum("pni,pni->pn", r, r))
        potential[here] = inverse @ charges
        field[here] = np.einsum("pn,pni->pi", inverse**3 * charges, r)
    return potential, field


def timed(call, repeats=2):
    """Least CPU time of some runs, and the last result."""
    best, found = np.inf, None
    for _ in range(repeats):
        start = time.process_time()
        found = call()
        best = min(best, time.process_time() - start)
    return best, found


def main():
    """Print points per second and errors."""
    levels = int(sys.argv[1]) if len(sys.argv) > 1 else 4
    n_points = int(sys.argv[2]) if len(sys.argv) > 2 else 10_000
    mesh = trimesh.creation.icosphere(subdivisions=levels)
    corners = mesh.vertices[mesh.faces][:, [0, 1, 2, 2]]
    density = 1.0 + 0.5 * mesh.triangles_center[:, 2]
    points = np.random.default_rng(0).normal(size=(n_points, 3))
    points *= 2.0 / np.linalg.norm(points, axis=1)[:, None]
    sums = PanelSum(corners, density)
    sums(points[:10])  # compiled before it is timed
    seconds, exact = timed(lambda: sums(points))
    sys.stdout.write(f"{len(corners)} panels, {n_points} points, one thread\n")
    sys.stdout.write(f"closed form, panels       {n_points / seconds:12.0f} points/s\n")
    charges, centroids = density * mesh.area_faces, mesh.triangles_center
    others = {"numpy, point charges": lambda: centroid_sum(points, centroids, charges)}
    try:
        import fmm3dpy
    except ImportError:
        sys.stdout.write("fmm3dpy is not installed: pip install fmm3dpy\n")
    else:

        def multipole():
            found = fmm3dpy.lfmm3d(
                eps=1e-6, sources=centroids.T.copy(), charges=charges, targets=points.T.copy(), pgt=2
            )
            # it includes the factor 1 / (4 pi)
            return 4.0 * np.pi * found.pottarg, -4.0 * np.pi * found.gradtarg.T

        others["fmm3dpy, point charges"] = multipole
    for name, call in others.items():
        other, (potential, field) = timed(call)
        error = np.abs(potential / exact.potential[:, 0] - 1.0).max()
        worst = np.linalg.norm(field - exact.field[:, :, 0], axis=1).max() / np.linalg.norm(exact.field, axis=1).max()
        sys.stdout.write(
            f"{name:25} {n_points / other:12.0f} points/s, {seconds / other:.2f} times as fast; "
            f"differs by {error:.1e} (field {worst:.1e})\n"
        )


if __name__ == "__main__":
    main()
