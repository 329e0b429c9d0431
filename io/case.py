"""The case file: TOML in, a checked `Case` out, one clear line for whatever is wrong."""

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from daraf.bem.errors import InputError

from .names import check_file_name
from .schema import NOT_YET, Air, CaseContent, ConductorEntry, Medium, Part, Rotation

__all__ = ["Case", "load_case", "make_case"]

_TABLES: dict[str, Any] = {
    "": CaseContent,
    "medium": Medium,
    "air": Air,
    "conductor": ConductorEntry,
    "part": Part,
    "rotation": Rotation,
}
# A case file is written by hand; anything larger is some other file.
_LARGEST = 4_000_000


@dataclass(frozen=True)
class Case:
    """A checked case.

    Attributes
    ----------
    content : CaseContent
        Values in SI.
    folder : Path
        Surface files are relative to it.
    file : Path or None
        The case file; None if the case was made in Python or from surface files.
    stated : dict
        The case as it was written, for the record.
    """

    content: CaseContent
    folder: Path
    file: Path | None = None
    stated: dict[str, Any] = field(default_factory=dict)

    @property
    def label(self) -> str:
        """What messages call the case."""
        return str(self.file) if self.file else "case"


def load_case(path: str | Path) -> Case:
    """Read and check a case file.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    Case

    Raises
    ------
    InputError
        If the file cannot be read or does not follow the schema.
    """
    file = Path(path)
    check_file_name(file)
    try:
        if file.stat().st_size > _LARGEST:
            raise InputError(f"{file}: too large for a case file; surface files are given with --unit instead")
        text = file.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise InputError(f"{file}: no such file; check the path of the case file") from None
    except IsADirectoryError:
        raise InputError(f"{file}: is a folder; name a case file") from None
    except UnicodeDecodeError as error:
        raise InputError(f"{file}: no UTF-8 text (byte {error.start}); save the case file as UTF-8") from None
    except OSError as error:
        raise InputError(f"{file}: cannot be read ({error.strerror}); check the path and its rights") from None
    if not text.strip():
        raise InputError(f"{file}: empty; a case needs at least one [[conductor]] with name and surface")
    try:
        stated = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{file}: no valid TOML: {_one_line(str(error))}; mend that line") from None
    return make_case(stated, folder=file.parent, file=file)


def make_case(stated: Mapping[str, Any], *, folder: str | Path, file: Path | None = None) -> Case:
    """Check a case given as nested tables.

    Parameters
    ----------
    stated : mapping
        As `tomllib` would return it.
    folder : str or Path
        Surface files are relative to it.
    file : Path, optional
        For messages.

    Returns
    -------
    Case

    Raises
    ------
    InputError
        If a key or value does not follow the schema, or asks for what this version does not solve.

    Examples
    --------
    >>> ball = {"name": "ball", "surface": "ball.stl"}
    >>> make_case({"unit": "mm", "conductor": [ball]}, folder=".").content.accuracy
    0.01
    """
    label = str(file) if file else "case"
    _refuse_not_yet(stated, label)
    try:
        content = CaseContent.model_validate(stated)
    except ValidationError as error:
        raise InputError(f"{label}: {_explain(error, stated)}") from None
    return Case(content, Path(folder), file, dict(stated))


def _refuse_not_yet(stated: Mapping[str, Any], label: str) -> None:
    for table, keys in NOT_YET.items():
        inside = stated if table == "" else stated.get(table)
        if not isinstance(inside, Mapping):
            continue
        for key in inside:
            if key in keys:
                place = f"{table}, " if table else ""
                raise InputError(
                    f"{label}: {place}key {key!r}: this version does not solve {keys[key]}; "
                    "take the key out only if the job makes sense without it"
                )


def _explain(error: ValidationError, stated: Mapping[str, Any]) -> str:
    """One line for the first complaint; a mistyped key comes first since it also leaves its twin missing."""
    complaints = error.errors(include_url=False)
    complaints.sort(key=lambda one: one["type"] != "extra_forbidden")
    first = complaints[0]
    where, kind = first["loc"], first["type"]
    table = next((item for item in reversed(where) if isinstance(item, str)), "")
    if table in ("conductor", "part") and kind in ("tuple_type", "model_type"):
        heading = {"conductor": "[[conductor]]", "part": "[[conductor.part]]"}[table]
        text = f"{table}: {_shown(first['input'])} is no list of tables; write {heading} in double brackets"
    elif kind == "extra_forbidden":
        text = _unknown_key(where, stated)
    elif kind == "missing":
        text = _place(where[:-1], stated) + f"{where[-1]!r} is missing; add it"
        if where == ("conductor",):
            text = "no conductor; add at least one [[conductor]] with name and surface"
    elif kind == "too_short" and where == ("conductor",):
        text = "no conductor; add at least one [[conductor]] with name and surface"
    else:
        said = first["msg"].removeprefix("Value error, ")
        if not isinstance(first.get("ctx", {}).get("error"), InputError):
            said = f"{_shown(first['input'])} does not fit: {said[:1].lower()}{said[1:]}"
        text = _place(where, stated) + said
    more = f" (and {len(complaints) - 1} more to mend)" if len(complaints) > 1 else ""
    return _one_line(text) + more


def _unknown_key(where: tuple[int | str, ...], stated: Mapping[str, Any]) -> str:
    key = str(where[-1])
    tables = [item for item in where[:-1] if isinstance(item, str)]
    known = list(_TABLES[tables[-1] if tables else ""].model_fields)
    near = get_close_matches(key.lower(), known, n=1, cutoff=0.5)
    hint = f"did you mean {near[0]!r}? " if near else ""
    return _place(where[:-1], stated) + f"unknown key {key!r}; {hint}Known: {', '.join(known)}"


def _place(where: tuple[int | str, ...], stated: Any) -> str:
    """Words for a location, such as "conductor 2 'guard', shift: "."""
    words: list[str] = []
    inside = stated
    for item in where:
        try:
            inside = inside[item]
        except (KeyError, IndexError, TypeError):
            inside = None
        if isinstance(item, int):
            name = inside.get("name") if isinstance(inside, Mapping) else None
            words[-1:] = [f"{words[-1] if words else ''} {item + 1}" + (f" {name!r}" if name else "")]
        else:
            words.append(item)
    return ", ".join(words) + ": " if words else ""


def _shown(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _one_line(text: str) -> str:
    return " ".join(text.split())
