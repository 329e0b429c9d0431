"""Run as a program: a STEP file to GLB by cascadio, with bounded memory and time.

Arguments: in, out, mm, radians, bytes, seconds.
"""

import sys
from pathlib import Path

__all__ = ["NOTHING_MADE"]

#: Exit code if the file was read and nothing came out.
NOTHING_MADE = 3


def _bound(most: int, seconds: int) -> None:
    try:
        import resource
    except ImportError:  # not every system can
        return
    resource.setrlimit(resource.RLIMIT_AS, (most, most))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    spent = int(sum(resource.getrusage(resource.RUSAGE_SELF)[:2]))
    resource.setrlimit(resource.RLIMIT_CPU, (spent + seconds, spent + seconds))


def _main(given: str, made: str, millimetres: float, radians: float, most: int, seconds: int) -> int:
    import cascadio

    _bound(most, seconds)
    code = cascadio.step_to_glb(
        given, made, tol_linear=millimetres, tol_angular=radians, merge_primitives=False, use_parallel=False
    )
    if code != 0 or not Path(made).exists():
        return NOTHING_MADE
    return 0


if __name__ == "__main__":
    sys.exit(_main(sys.argv[1], sys.argv[2], float(sys.argv[3]), float(sys.argv[4]), *map(int, sys.argv[5:7])))
