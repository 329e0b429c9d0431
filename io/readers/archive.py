"""Zipped meshes: .zip (PKWARE, APPNOTE) with one or more mesh files in it, and .gz (RFC 1952) about one.

Nothing is unpacked to disk. How much may come out is bounded in bytes, in members and in ratio, and counted while it
comes out: what an archive says of itself is not believed.
"""

import stat
import zipfile
import zlib
from io import BytesIO
from pathlib import Path, PurePosixPath
from typing import IO

from daraf.bem.errors import InputError

from .dispatch import read_source
from .raw import READERS, RawFile, RawPart, Source, check_side_file, register

__all__ = ["allowed_bytes", "open_zip", "read_gz", "read_member", "read_zip"]

_ARCHIVES = (".zip", ".gz")

#: Bounds of what may come out of one archive. Meshes shrink 3 to 30 times; 100 is no mesh any more. Small archives
#: are free of the ratio, since what comes out of them is harmless.
_MOST_BYTES = 512 * 2**20
_MOST_MEMBERS = 1000
_MOST_RATIO = 100
_HARMLESS = 16 * 2**20


@register(".zip")
def read_zip(source: Source) -> RawFile:
    """Read every mesh file of a zip archive; other files in it are left alone."""
    path = source.path
    with open_zip(path, source.data) as archive:
        meshes = [one.filename for one in archive.infolist() if _is_mesh(one.filename)]
        if not meshes:
            known = ", ".join(sorted(set(READERS) - set(_ARCHIVES)))
            raise InputError(f"{path}: holds no mesh file; there must be one of {known} in it")
        budget = [allowed_bytes(len(source.data))]
        raws = []
        for name in meshes:
            member = path / name

            def beside(wanted: str, member: Path = member, name: str = name) -> bytes:
                inside = PurePosixPath(name).parent / check_side_file(member, wanted)
                return read_member(path, archive, str(inside), budget)

            data = read_member(path, archive, name, budget)
            raws.append(read_source(Source(member, data, beside, source.facet_tolerance)))
    units = list(dict.fromkeys(raw.unit for raw in raws))
    if len(units) > 1:
        shown = " and ".join(unit or "no unit" for unit in units[:2])
        raise InputError(f"{path}: its mesh files carry {shown}; unpack it and name the files one by one")
    parts = [_named(part, raw.path.stem) for raw in raws for part in raw.parts]
    remarks = tuple(dict.fromkeys(remark for raw in raws for remark in raw.remarks))
    return RawFile(path, parts, units[0], remarks)


@register(".gz")
def read_gz(source: Source) -> RawFile:
    """Read a mesh file packed by gzip; its own extension stands before the .gz."""
    path = source.path
    inner = path.with_suffix("")
    if inner.suffix.lower() in ("", *_ARCHIVES):
        raise InputError(f"{path}: the mesh format must stand before .gz, as in part.stl.gz; rename or unpack it")
    allowed = allowed_bytes(len(source.data))
    unpacker = zlib.decompressobj(wbits=31)  # 16 + 15: a gzip header, the largest window
    try:
        data = unpacker.decompress(source.data, allowed + 1)
    except zlib.error:
        raise InputError(f"{path}: is no gzip file or damaged; pack it again") from None
    if len(data) > allowed:
        raise InputError(_bomb(path, allowed))
    if not unpacker.eof or unpacker.unused_data:
        raise InputError(f"{path}: is truncated, or has something behind its end; pack it again")
    if not data:
        raise InputError(f"{path}: the file in it is empty; pack it again")
    return read_source(Source(inner, data, source.beside, source.facet_tolerance))


def open_zip(path: Path, data: bytes) -> zipfile.ZipFile:
    """Open a zip archive after a look at its table of contents.

    Parameters
    ----------
    path : Path
    data : bytes

    Returns
    -------
    zipfile.ZipFile

    Raises
    ------
    InputError
        If it is no zip archive, or a member is encrypted, a link, or named so that it would lie outside of it.
    """
    try:
        archive = zipfile.ZipFile(BytesIO(data))
    except (zipfile.BadZipFile, ValueError, NotImplementedError, OverflowError):
        raise InputError(f"{path}: is no zip archive, or truncated or damaged; export or pack it again") from None
    members = archive.infolist()
    if len(members) > _MOST_MEMBERS:
        raise InputError(f"{path}: holds {len(members)} files, more than {_MOST_MEMBERS}; unpack it")
    seen: set[str] = set()
    for member in members:
        name = member.filename
        check_side_file(path, name.removesuffix("/").replace("%", "%25"))
        if stat.S_ISLNK(member.external_attr >> 16):
            raise InputError(f"{path}: {name[:60]!r} in it is a link; pack the file itself")
        if member.flag_bits & 1:
            raise InputError(f"{path}: {name[:60]!r} in it is encrypted; pack it without a password")
        if name in seen:
            raise InputError(f"{path}: holds {name[:60]!r} twice; pack it again")
        seen.add(name)
    return archive


def read_member(path: Path, archive: zipfile.ZipFile, name: str, budget: list[int]) -> bytes:
    """Unpack one file of an archive.

    Parameters
    ----------
    path : Path
        Of the archive.
    archive : zipfile.ZipFile
    name : str
    budget : list of one int
        Bytes that may still come out of the archive; lowered by this call.

    Returns
    -------
    bytes

    Raises
    ------
    InputError
        If it is not there, damaged, packed by a rare method, or larger than allowed.
    """
    try:
        info = archive.getinfo(name)
    except KeyError:
        raise InputError(f"{path}: the file {name[:60]!r} is missing in it; pack it again") from None
    if info.compress_type not in (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED):
        raise InputError(f"{path}: {name[:60]!r} is packed by a rare method; pack it with the usual one (deflate)")
    try:
        with archive.open(info) as stream:
            data = _bounded(stream, budget[0])
    except (zipfile.BadZipFile, zlib.error, EOFError, ValueError, NotImplementedError, OSError):
        raise InputError(f"{path}: {name[:60]!r} in it is damaged; export or pack it again") from None
    if data is None:
        raise InputError(_bomb(path, budget[0]))
    budget[0] -= len(data)
    return data


def allowed_bytes(packed: int) -> int:
    """Bytes that may come out of an archive of this size.

    Parameters
    ----------
    packed : int

    Returns
    -------
    int
    """
    return min(_MOST_BYTES, max(_HARMLESS, _MOST_RATIO * packed))


def _bounded(stream: IO[bytes], most: int) -> bytes | None:
    """Content of a stream, or None if it is longer."""
    data = stream.read(most + 1)
    return None if len(data) > most else data


def _bomb(path: Path, allowed: int) -> str:
    return (
        f"{path}: more than {allowed / 2**20:.0f} MiB come out of it, which no packed mesh of its size does; "
        "unpack it yourself if you trust it"
    )


def _is_mesh(name: str) -> bool:
    suffix = PurePosixPath(name).suffix.lower()
    # what some systems add beside each file (resource forks) is no mesh
    return suffix in READERS and suffix not in _ARCHIVES and not name.startswith("__MACOSX/")


def _named(part: RawPart, stem: str) -> RawPart:
    return part if part.name.strip() else RawPart(stem, part.vertices, part.triangles, part.spacing)
