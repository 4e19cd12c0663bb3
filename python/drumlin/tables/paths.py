"""Which files a path, a glob, a directory or a list of them stands for."""

from __future__ import annotations

import glob
import os
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any
from urllib.parse import unquote

from drumlin.errors import SourceError, nearest

__all__ = ["FileEntry", "find_files", "is_path", "natural_order", "without_login"]

SUFFIXES = (".parquet", ".parq", ".pq")
_NULL = "__HIVE_DEFAULT_PARTITION__"
_URI = re.compile(r"^[A-Za-z][A-Za-z0-9+.-]+://")


@dataclass(frozen=True, slots=True)
class FileEntry:
    """One file: where it is, how large and how old it was, and the key=value folders below the place that was named.

    `shown` is the path as the user would write it; `modified` is in nanoseconds (0 where the file system does not
    tell).
    """

    filesystem: Any
    path: str
    shown: str
    size: int
    modified: int
    partition: tuple[tuple[str, str | None], ...]


def is_path(rows: object) -> bool:
    """Return whether `rows` is a path, or a list of nothing but paths."""
    if isinstance(rows, (list, tuple)):
        return bool(rows) and all(isinstance(item, (str, os.PathLike)) for item in rows)
    return isinstance(rows, (str, os.PathLike))


def natural_order(text: str) -> tuple[list[tuple[int, int, str]], str]:
    """Return a sort key under which digits count as numbers.

    >>> sorted(["day10.parquet", "day9.parquet"], key=natural_order)
    ['day9.parquet', 'day10.parquet']
    """
    parts = re.split(r"([0-9]+)", text)
    return [(1, int(part), "") if part.isdecimal() else (0, 0, part) for part in parts], text


def find_files(rows: str | os.PathLike[str] | Sequence[str | os.PathLike[str]]) -> list[FileEntry]:
    """Return the files that `rows` names, sorted with digits as numbers.

    A directory stands for the Parquet files at any depth below it, save hidden ones (names with `.` or `_` in front).
    Any file system that pyarrow knows by URI (`s3://`, `gs://`, `file://`, ...) works too, and with fsspec installed
    those that it knows; files of several of them may stand in one list.

    Raises SourceError when a path does not exist, a glob or directory holds no file, or a file is named twice.
    """
    items = list(rows) if isinstance(rows, (list, tuple)) else [rows]
    entries: list[FileEntry] = []
    for item in items:
        entries += _expand(os.fspath(item))  # type: ignore[arg-type]
    entries.sort(key=lambda entry: natural_order(entry.shown))
    seen: set[tuple[str, str]] = set()
    for entry in entries:
        place = (entry.filesystem.type_name, entry.path)
        if place in seen:
            raise SourceError(f"{entry.shown} is named twice. Name each file once.", file=entry.shown)
        seen.add(place)
    return entries


def _expand(text: str) -> list[FileEntry]:
    if not text:
        raise SourceError("The path is empty. Name a Parquet file, a glob or a directory.")
    from pyarrow import fs

    if _URI.match(text):
        return _expand_uri(text)
    local = fs.LocalFileSystem()
    text = os.path.expanduser(text)
    if os.path.exists(text):
        return _walk(local, text, text, base=text, named=True)
    if glob.has_magic(text):
        base = _fixed_part(text)
        found = [path for path in glob.glob(text, recursive=True) if not _hidden(os.path.relpath(path, base or "."))]
        entries = [entry for path in found for entry in _walk(local, path, path, base=base, named=False)]
        if not entries:
            raise SourceError(
                f"No Parquet file matches {text}. Check the pattern (it is relative to {os.getcwd()}).", file=text
            )
        return list({entry.path: entry for entry in entries}.values())
    raise SourceError(f"{text} does not exist.{_alike(text)} Name a Parquet file, a glob or a directory.", file=text)


def _expand_uri(text: str) -> list[FileEntry]:
    """The files of a URI; its options (`?region=...`) may follow, and are not shown, nor is who logs in."""
    from pyarrow import fs

    place, options = _without_options(text)
    shown = without_login(text)
    scheme = place.partition("://")[0] + "://"
    fixed = _fixed_part(place) if glob.has_magic(place) else place
    prefix = "" if scheme == "file://" else scheme
    try:
        filesystem, path = _file_system(fixed + options)
        path = path.rstrip("/") or path
        if fixed == place:
            return _walk(filesystem, path, prefix + path, base=path, named=True)
        pattern = re.compile(_translate(place[len(fixed) :]))
        files = filesystem.get_file_info(fs.FileSelector(path, recursive=True))
    except SourceError:
        raise
    except (OSError, ValueError) as error:
        text = str(error).strip().splitlines()[0]
        raise SourceError(
            f"{shown} cannot be reached: {text} Check the address, and who may read there.", file=shown
        ) from error
    entries = []
    for info in files:
        inner = info.path[len(path) :].lstrip("/")
        if info.type == fs.FileType.File and pattern.fullmatch(inner) and not _hidden(inner):
            entries.append(_entry(filesystem, info, prefix + info.path, path))
    if not entries:
        raise SourceError(f"No file matches {shown}. Check the pattern.", file=shown)
    return entries


def without_login(text: str) -> str:
    """Return a path as it may be shown and kept: of a URI without its options and who logs in.

    >>> without_login("s3://key:secret@depot/scans?region=x"), without_login("scans/*.parquet")
    ('s3://depot/scans', 'scans/*.parquet')
    """
    if not _URI.match(text):
        return text
    scheme, _, rest = _without_options(text)[0].partition("://")
    return f"{scheme}://{rest.rpartition('@')[2]}"


def _without_options(uri: str) -> tuple[str, str]:
    """Part a URI from its options; another question mark stands for one letter of a name."""
    found = re.search(r"\?[A-Za-z_]\w*=", uri)
    return (uri, "") if found is None else (uri[: found.start()], uri[found.start() :])


def _file_system(uri: str) -> tuple[Any, str]:
    """Return the file system of a URI and the path on it: one of pyarrow's, or else one of fsspec's if there is one."""
    from pyarrow import fs

    try:
        found: tuple[Any, str] = fs.FileSystem.from_uri(uri)
        return found
    except ValueError as error:
        if "Unrecognized filesystem type" not in str(error):
            raise
        scheme = uri.partition("://")[0]
        try:
            import fsspec
        except ImportError:
            raise ValueError(
                f"pyarrow knows no file system {scheme!r}. Copy the files, or install fsspec, which knows more."
            ) from error
        inner, path = fsspec.core.url_to_fs(uri)
        return fs.PyFileSystem(fs.FSSpecHandler(inner)), path


def _walk(filesystem: Any, path: str, shown: str, *, base: str, named: bool) -> list[FileEntry]:
    """Return the file at `path`, or the Parquet files below it when it is a directory."""
    from pyarrow import fs

    info = filesystem.get_file_info(path)
    if info.type == fs.FileType.NotFound:
        raise SourceError(f"{shown} does not exist. Name a Parquet file, a glob or a directory.", file=shown)
    if info.type == fs.FileType.File:
        return [_entry(filesystem, info, shown, os.path.dirname(base) if base == path else base)]
    files = [found for found in filesystem.get_file_info(fs.FileSelector(path, recursive=True)) if found.is_file]
    start = len(path.rstrip("/"))
    visible = [found for found in files if not _hidden(found.path[start:].lstrip("/"))]
    chosen = [found for found in visible if found.path.lower().endswith(SUFFIXES)]
    if not chosen and named:
        what = f"{len(files)} other files, such as {os.path.basename(files[0].path)}" if files else "nothing"
        raise SourceError(
            f"The directory {shown} holds no Parquet files ({', '.join(SUFFIXES)}), but {what}. "
            "Name the files by a glob.",
            file=shown,
        )
    return [_entry(filesystem, found, shown.rstrip("/") + found.path[start:], base) for found in chosen]


def _entry(filesystem: Any, info: Any, shown: str, base: str) -> FileEntry:
    inner = os.path.relpath(info.path, base or ".") if info.path.startswith(base or "") else info.path
    pairs = []
    for folder in inner.split("/")[:-1]:
        name, equals, value = folder.partition("=")
        if equals and name:
            pairs.append((unquote(name), None if value == _NULL else unquote(value)))
    return FileEntry(filesystem, _absolute(info.path, filesystem), shown, info.size, info.mtime_ns or 0, tuple(pairs))


def _absolute(path: str, filesystem: Any) -> str:
    return os.path.abspath(path) if filesystem.type_name == "local" else path


def _fixed_part(pattern: str) -> str:
    """Return the leading folders of a glob that hold no wildcard."""
    fixed = []
    for part in pattern.split("/")[:-1]:
        if glob.has_magic(part):
            break
        fixed.append(part)
    return "/".join(fixed) + "/" if fixed else ""


def _hidden(inner: str) -> bool:
    parts = inner.split("/")
    return any(part.startswith((".", "_")) and part not in (".", "..") and "=" not in part for part in parts)


def _translate(pattern: str) -> str:
    """Return a regular expression for a glob in which `*` stays within one folder and `**` does not."""
    out, i = "", 0
    while i < len(pattern):
        if pattern.startswith("**/", i):
            out, i = out + "(?:.*/)?", i + 3
        elif pattern.startswith("**", i):
            out, i = out + ".*", i + 2
        elif pattern[i] == "*":
            out, i = out + "[^/]*", i + 1
        elif pattern[i] == "?":
            out, i = out + "[^/]", i + 1
        elif pattern[i] == "[" and "]" in pattern[i + 2 :]:
            end = pattern.index("]", i + 2)
            inside = pattern[i + 1 : end].replace("\\", "\\\\")
            out, i = out + "[" + ("^" + inside[1:] if inside[0] == "!" else inside) + "]", end + 1
        else:
            out, i = out + re.escape(pattern[i]), i + 1
    return out


def _alike(path: str) -> str:
    folder = os.path.dirname(path) or "."
    try:
        names = os.listdir(folder)
    except OSError:
        return ""
    return nearest(os.path.basename(path), names)
