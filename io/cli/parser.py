"""Argument parser whose complaints are one line with the nearest known word.

The standard library's argparse: help takes 25 ms, against 150 ms (600 ms where Python may not keep
bytecode) with typer, and half a second is all that `daraf --help` may take.
"""

import argparse
import re
from collections.abc import Sequence
from difflib import get_close_matches
from typing import NoReturn

__all__ = ["Parser", "UsageError", "case_file_among", "positive_whole_number"]


class UsageError(Exception):
    """The command line itself is wrong.

    No `InputError`, so that a look at the help does not load the physics.
    """


class Parser(argparse.ArgumentParser):
    """`argparse.ArgumentParser` that raises `UsageError` and suggests the nearest option or command."""

    def error(self, message: str) -> NoReturn:
        """Raise instead of printing the usage and leaving the program."""
        raise UsageError(f"{self._worded(message)}; see `{self.prog} --help`")

    def _worded(self, message: str) -> str:
        unknown = re.match(r"unrecognized arguments: (\S+)", message)
        if unknown:
            return f"unknown argument {unknown[1]}{_hint(unknown[1].split('=')[0], self._known_options())}"
        choice = re.match(r"argument COMMAND: invalid choice: '(.*?)' \(choose from (.*)\)", message)
        if choice:
            known = re.findall(r"[\w-]+", choice[2])
            return f"unknown command {choice[1]!r}{_hint(choice[1], known)}; commands: {', '.join(known)}"
        return message.removeprefix("argument ")

    def _known_options(self) -> list[str]:
        """Options of this parser and of its commands: what a command does not know, the top one reports."""
        known = list(self._option_string_actions)
        for action in self._actions:
            if isinstance(action, argparse._SubParsersAction):
                known += [option for sub in action.choices.values() for option in sub._option_string_actions]
        return known


def _hint(word: str, known: object) -> str:
    near = get_close_matches(word, list(known), n=1, cutoff=0.6)  # type: ignore[call-overload]
    return f", did you mean {near[0]}?" if near else ""


def positive_whole_number(text: str) -> int:
    """Convert an argument such as the number of threads."""
    if not text.isascii() or not text.isdigit() or int(text) < 1:
        raise argparse.ArgumentTypeError(f"{text!r} is no whole number from 1")
    return int(text)


def case_file_among(files: Sequence[str], **of_surfaces: str | None) -> str | None:
    """Return the case file, or None if the files are surfaces; `of_surfaces` are options that a case states itself."""
    cases = [name for name in files if name.lower().endswith(".toml")]
    if not cases:
        return None
    if len(files) > 1:
        raise UsageError(f"{cases[0]}: a case file stands alone; name one case, or surface files only")
    for name, value in of_surfaces.items():
        if value is not None:
            option = f"--{name.replace('_', '-')}"
            raise UsageError(f"{option} is for surface files; {cases[0]} states its {name} itself, change it there")
    return str(cases[0])
