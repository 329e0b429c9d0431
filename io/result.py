"""The result folder `NAME.daraf/`: made whole or not at all, read back by every later command."""

import errno
import json
import os
import shutil
import tempfile
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from daraf.bem.errors import InputError

from .surface_file import SolvedSurface, read_surface

__all__ = ["Result", "check_destination", "document_text", "foreign_files", "read_result", "write_result"]

_DOCUMENT, _SURFACE, _LOG = "result.json", "surface.vtp", "log.txt"


@dataclass(frozen=True, eq=False)
class Result:
    """A result read back from its folder.

    Attributes
    ----------
    folder : Path
    document : dict
        Content of `result.json`, SI.
    """

    folder: Path
    document: dict[str, Any]

    @cached_property
    def surface(self) -> SolvedSurface:
        """Panels and charge densities, read on first use."""
        return read_surface(self.folder / _SURFACE)

    @property
    def log(self) -> str:
        """Text of `log.txt`."""
        return (self.folder / _LOG).read_text(encoding="utf-8")


def document_text(document: dict[str, Any]) -> str:
    """`result.json` as text: keys in their order, one line per innermost list.

    Raises
    ------
    ValueError
        If a number is not finite: JSON has no word for it, and a result must not hold one.
    """
    return _json(document, 0) + "\n"


def _json(value: Any, depth: int) -> str:
    compact = json.dumps(value, ensure_ascii=False, allow_nan=False)
    nested = isinstance(value, dict | list) and any(isinstance(item, dict | list) for item in _items(value))
    if not nested and (depth > 1 or not isinstance(value, dict)):
        return compact
    pad, end = "  " * (depth + 1), "  " * depth
    if isinstance(value, dict):
        inside = [
            f"{pad}{json.dumps(key, ensure_ascii=False)}: {_json(item, depth + 1)}" for key, item in value.items()
        ]
        return "{\n" + ",\n".join(inside) + f"\n{end}}}"
    return "[\n" + ",\n".join(pad + _json(item, depth + 1) for item in value) + f"\n{end}]"


def _items(value: dict[str, Any] | list[Any]) -> list[Any]:
    return list(value.values()) if isinstance(value, dict) else value


def check_destination(folder: str | Path) -> Path:
    """Find out before a solve whether its result can be written.

    Parameters
    ----------
    folder : str or Path

    Returns
    -------
    Path
        Absolute, links resolved.

    Raises
    ------
    InputError
        If the place cannot be written, or holds something that is no result of daraf.
    """
    target = Path(folder).expanduser().resolve()
    if not target.name:
        raise InputError(f"{folder}: is no name for a result folder; give one such as probe.daraf")
    if not target.parent.is_dir():
        raise InputError(f"{folder}: the folder {target.parent} does not exist; create it or choose another with --out")
    if target.exists() and not _replaceable(target):
        raise InputError(
            f"{folder}: exists and is no result of daraf, so it is not replaced; choose another with --out"
        )
    try:
        os.rmdir(_sibling(target))
    except OSError as error:
        raise _refusal(target, error) from None
    return target


def write_result(
    folder: str | Path,
    document: dict[str, Any],
    surface: bytes,
    log: str,
    *,
    extras: dict[str, bytes] | None = None,
) -> Path:
    """Write a result folder whole or not at all.

    A folder beside the target is filled, flushed to disk and renamed; an older result steps aside only
    then and is removed last. Whatever else lies in the folder of an older result is kept.

    Parameters
    ----------
    folder : str or Path
    document : dict
        Content of `result.json`.
    surface : bytes
        Content of `surface.vtp`.
    log : str
        Content of `log.txt`.
    extras : dict of str to bytes, optional
        More files by name.

    Returns
    -------
    Path
        The folder written.

    Raises
    ------
    InputError
        If it cannot be written; nothing is left behind and an older result stays.
    """
    target = check_destination(folder)
    files = {
        _DOCUMENT: document_text(document).encode(),
        _SURFACE: surface,
        _LOG: log.encode(),
        **(extras or {}),
    }
    aside: Path | None = None
    try:
        draft = _sibling(target)
        try:
            for name in foreign_files(target):
                if name not in files:
                    _take_along(target / name, draft / name)
            for name, content in files.items():
                _write(draft / name, content)
            if target.exists():
                aside = _sibling(target)
                os.replace(target, aside)
            os.replace(draft, target)
        except BaseException:
            # Also on Ctrl-C: whatever happens, the older result is in its place again.
            if aside is not None and not target.exists() and any(aside.iterdir()):
                os.replace(aside, target)
            raise
        finally:
            for rest in (draft, aside):
                if rest is not None:
                    shutil.rmtree(rest, ignore_errors=True)
    except OSError as error:
        raise _refusal(target, error) from None
    return target


def foreign_files(folder: str | Path) -> list[str]:
    """Names of what lies in a result folder and is no part of a result; empty if there is no such folder."""
    place = Path(folder)
    if not place.is_dir():
        return []
    return sorted(item.name for item in place.iterdir() if item.name not in (_DOCUMENT, _SURFACE, _LOG))


def read_result(folder: str | Path) -> Result:
    """Read a result folder.

    Parameters
    ----------
    folder : str or Path

    Returns
    -------
    Result

    Raises
    ------
    InputError
        If the folder is missing or no result of daraf.
    """
    place = Path(folder)
    file = place / _DOCUMENT
    try:
        document = json.loads(file.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError(f"{place}: no result of daraf (no {_DOCUMENT}); name the folder `daraf solve` wrote") from None
    except OSError as error:
        raise InputError(f"{file}: cannot be read ({error.strerror}); name the folder `daraf solve` wrote") from None
    except ValueError:
        raise InputError(f"{file}: damaged, not valid JSON; solve the case again") from None
    if not isinstance(document, dict) or "daraf" not in document or "capacitance" not in document:
        raise InputError(f"{file}: no result of daraf; name the folder `daraf solve` wrote")
    return Result(place, document)


def _replaceable(target: Path) -> bool:
    if not target.is_dir():
        return False
    if not any(target.iterdir()):
        return True
    try:
        read_result(target)
    except InputError:
        return False
    return True


def _take_along(source: Path, destination: Path) -> None:
    """Put a file or folder into the new result as well; files are linked where the disk can, else copied."""

    def linked(one: str, other: str) -> str:
        try:
            os.link(one, other, follow_symlinks=False)
        except OSError:
            shutil.copy2(one, other, follow_symlinks=False)
        return other

    if source.is_dir() and not source.is_symlink():
        shutil.copytree(source, destination, symlinks=True, copy_function=linked)
    else:
        linked(str(source), str(destination))


def _sibling(target: Path) -> Path:
    """Make an empty hidden folder beside the target: same file system, so that renaming is one step."""
    made = Path(tempfile.mkdtemp(prefix=f".{target.name}-", suffix=".part", dir=target.parent))
    # mkdtemp makes it private; a result is as readable as any folder the user makes.
    mask = os.umask(0)
    os.umask(mask)
    made.chmod(0o777 & ~mask)
    return made


def _write(path: Path, content: bytes) -> None:
    with path.open("wb") as stream:
        stream.write(content)
        stream.flush()
        # Some file systems tell only now that the disk is full.
        os.fsync(stream.fileno())


def _refusal(target: Path, error: OSError) -> InputError:
    reason = error.strerror or str(error)
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        return InputError(
            f"{target}: the disk is full, no result written; free space or choose another place with --out"
        )
    return InputError(f"{target}: cannot be written ({reason}), no result written; choose another place with --out")
