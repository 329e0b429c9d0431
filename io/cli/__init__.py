"""The command line: `main`, and one module per sub-command beside it."""

from .main import main

__all__ = ["main"]
