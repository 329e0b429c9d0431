"""Everything of daraf that faces the outside: files, command line, tables.

The names below load on first use, so that ``import daraf.io`` costs nothing.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from .bodies import Body, read_bodies
    from .case import Case, load_case, make_case
    from .case_inspection import inspect_case
    from .changes import Mend
    from .inspection import inspect_files
    from .joining import bodies_to_surface
    from .markers import write_marks
    from .mending import fit_bodies
    from .outcome import Outcome, solve_case
    from .result import Result, read_result

__all__ = [
    "Body",
    "Case",
    "Mend",
    "Outcome",
    "Result",
    "bodies_to_surface",
    "fit_bodies",
    "inspect_case",
    "inspect_files",
    "load_case",
    "make_case",
    "read_bodies",
    "read_result",
    "solve_case",
    "write_marks",
]

_HOMES = {
    "Body": "bodies",
    "Case": "case",
    "Mend": "changes",
    "Outcome": "outcome",
    "Result": "result",
    "bodies_to_surface": "joining",
    "fit_bodies": "mending",
    "inspect_case": "case_inspection",
    "inspect_files": "inspection",
    "load_case": "case",
    "make_case": "case",
    "read_bodies": "bodies",
    "read_result": "result",
    "solve_case": "outcome",
    "write_marks": "markers",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f".{_HOMES[name]}", __name__), name)


def __dir__() -> list[str]:
    return sorted(__all__)
