"""Run as a program: a STEP file to GLB by cascadio, with bounded memory. Arguments: in, out, mm, radians, bytes."""

import sys
from pathlib import Path

__all__ = ["NOTHING_MADE"]

#: Exit code if the file was read and nothing came out.
NOTHING_MADE = 3


def _bound_memory(most: int) -> None:
    try:
        import resource
    except ImportError:  # not every system can
        return
    resource.setrlimit(resource.RLIMIT_AS, (most, most))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))


def _main(given: str, made: str, millimetres: float, radians: float, most: int) -> int:
    import cascadio

    _bound_memory(most)
    glb = cascadio.to_glb_bytes(
        Path(given).read_bytes(), tol_linear=millimetres, tol_angular=radians, use_parallel=False
    )
    if not glb:
        return NOTHING_MADE
    Path(made).write_bytes(glb)
    return 0


if __name__ == "__main__":
    sys.exit(_main(sys.argv[1], sys.argv[2], float(sys.argv[3]), float(sys.argv[4]), int(sys.argv[5])))
