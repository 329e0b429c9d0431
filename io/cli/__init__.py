"""The command line: `main` and `program`, and one module per sub-command beside it."""

from .main import main, program

__all__ = ["main", "program"]
