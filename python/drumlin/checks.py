"""Checks of option values: each returns the value in its canonical form, or raises OptionError.

A message says what was found and what is allowed.
"""

from __future__ import annotations

import math
import operator
import os
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any

from drumlin.errors import OptionError, nearest

Check = Callable[[str, Any], Any]


def refuse(name: str, value: Any, allowed: str, hint: str = "") -> OptionError:
    """Return the error for a value that is not allowed."""
    return OptionError(f"{name}={shown(value)} is not allowed: {allowed}.{hint}", option=name, found=shown(value))


def shown(value: Any) -> str:
    """Return a short text of a value for messages."""
    try:
        text = repr(value)
    except Exception:  # a broken repr must not hide the message
        text = f"<{type(value).__name__}>"
    return text if len(text) <= 80 else text[:77] + "..."


def as_whole(value: Any) -> int | None:
    """Return an int for int-like values (NumPy integers included), None for anything else (bool included)."""
    if isinstance(value, bool) or type(value).__name__ in ("bool", "bool_"):
        return None
    try:
        return operator.index(value)
    except TypeError:
        return None


def as_number(value: Any) -> float | None:
    """Return a float for real numbers (NumPy scalars included), None for anything else (bool and text included)."""
    if isinstance(value, bool | str | bytes) or type(value).__name__ in ("bool", "bool_"):
        return None
    try:
        return float(value)
    except (TypeError, ValueError, OverflowError):
        return None


def whole(least: int, most: int) -> Check:
    """A whole number from `least` to `most`."""

    def check(name: str, value: Any) -> int:
        found = as_whole(value)
        if found is None or not least <= found <= most:
            raise refuse(name, value, f"give a whole number from {least:,} to {most:,}")
        return found

    return check


def whole_or_none(least: int, most: int) -> Check:
    """A whole number from `least` to `most`, or None."""
    inner = whole(least, most)

    def check(name: str, value: Any) -> int | None:
        return None if value is None else int(inner(name, value))

    return check


def number(least: float, below: float = math.inf) -> Check:
    """A finite number from `least` to just below `below`."""
    wanted = f"give a number of at least {least:g}" + (f" and below {below:g}" if below < math.inf else "")

    def check(name: str, value: Any) -> float:
        found = as_number(value)
        if found is None or not math.isfinite(found) or not least <= found < below:
            raise refuse(name, value, wanted)
        return found

    return check


def choice(allowed: Sequence[str], later: Mapping[str, str] | None = None) -> Check:
    """One of the texts in `allowed`; `later` holds advice for texts that other versions know."""
    listed = " or ".join(repr(one) for one in allowed)

    def check(name: str, value: Any) -> str:
        if isinstance(value, str) and value in allowed:
            return value
        if isinstance(value, str) and later and value in later:
            raise refuse(name, value, f"{later[value]} (available: {listed})")
        raise refuse(name, value, f"give {listed}", nearest(value, allowed) if isinstance(value, str) else "")

    return check


def folder_or_none(name: str, value: Any) -> str | None:
    """The path of a folder that exists and may be written to, or None."""
    if value is None:
        return None
    if not isinstance(value, str | os.PathLike) or not isinstance(os.fspath(value), str) or not os.fspath(value):
        raise refuse(name, value, "give the path of a folder")
    path = os.path.expanduser(os.fspath(value))
    if not os.path.isdir(path):
        raise refuse(name, value, "there is no such folder; make it first, or name another")
    if not os.access(path, os.W_OK | os.X_OK):
        raise refuse(name, value, "the folder is not writable; name another")
    return path


def switch(name: str, value: Any) -> bool:
    """True or False."""
    if isinstance(value, bool):
        return value
    if type(value).__name__ in ("bool", "bool_"):
        return bool(value)
    raise refuse(name, value, "give True or False")


def text(name: str, value: Any) -> str:
    """A text, also an empty one."""
    if isinstance(value, str):
        return value
    raise refuse(name, value, "give a text")


def progress(name: str, value: Any) -> Any:
    """True, False or a callable."""
    if isinstance(value, bool) or callable(value):
        return value
    raise refuse(name, value, "give True, False or a callable that takes one event (a dict)")


def split_names(value: str) -> list[str]:
    """Split "a, b,c" at the commas."""
    return [part.strip() for part in value.split(",") if part.strip()]


def name_or_none(name: str, value: Any) -> str | None:
    """One column name, or None."""
    if value is None or (isinstance(value, str) and value):
        return value
    raise refuse(name, value, "give the name of one column")


def names_or_none(name: str, value: Any) -> tuple[str, ...] | None:
    """Column names without repeats, or None; one text is one name."""
    if value is None:
        return None
    return names(name, value)


def names(name: str, value: Any) -> tuple[str, ...]:
    """Column names without repeats; one text is one name."""
    if isinstance(value, str):
        value = [value]
    if isinstance(value, Mapping | bytes) or not isinstance(value, Iterable):
        raise refuse(name, value, "give a list of column names")
    found = tuple(value)
    if not found:
        raise refuse(name, value, "name at least one column")
    for one in found:
        if not isinstance(one, str) or not one:
            raise refuse(name, one, "every column name must be a text that is not empty")
        if found.count(one) > 1:
            raise OptionError(f"{name} names {one!r} more than once.", option=name, found=one)
    return found


def all_or_names(name: str, value: Any) -> str | tuple[str, ...]:
    """ "all", or column names (an empty list carries nothing but keys)."""
    if isinstance(value, str) and value == "all":
        return value
    if isinstance(value, Sequence) and not isinstance(value, str):
        if list(value) == ["all"]:
            return "all"
        if len(value) == 0:
            return ()
    return names(name, value)


def several(allowed: Sequence[str]) -> Check:
    """Any of the texts in `allowed`, none twice."""
    one = choice(allowed)

    def check(name: str, value: Any) -> tuple[str, ...]:
        listed = [value] if isinstance(value, str) else value
        if isinstance(listed, Mapping) or not isinstance(listed, Iterable):
            raise refuse(name, value, f"give a list of {', '.join(map(repr, allowed))}")
        return tuple(dict.fromkeys(str(one(name, item)) for item in listed))

    return check


def codes(name: str, value: Any) -> dict[str, tuple[float, ...]] | None:
    """Missing-value codes: {column: value or values}, or a list of "column=value" texts."""
    if value is None:
        return None
    if isinstance(value, str):
        value = [value]
    collected: dict[str, list[float]] = {}
    for column, listed in _code_pairs(name, value):
        if not isinstance(column, str) or not column:
            raise refuse(name, column, "give {column: [values]}, or {'*': [values]} for every column")
        many = listed if isinstance(listed, Iterable) and not isinstance(listed, str | bytes) else [listed]
        for one in many:
            found = as_number(one)
            if found is None or not math.isfinite(found):
                raise refuse(name, one, f"a code of column {column!r} must be a finite number")
            if found not in collected.setdefault(column, []):
                collected[column].append(found)
    return {column: tuple(sorted(collected[column])) for column in sorted(collected) if collected[column]} or None


def _code_pairs(name: str, value: Any) -> Iterable[tuple[Any, Any]]:
    if isinstance(value, Mapping):
        return value.items()
    pairs = []
    if isinstance(value, bytes) or not isinstance(value, Iterable):
        raise refuse(name, value, "give {column: [values]}")
    for item in value:
        column, found, code = item.rpartition("=") if isinstance(item, str) else ("", "", "")
        try:
            pairs.append((column.strip(), float(code)))
        except ValueError:
            raise refuse(name, item, "write COLUMN=NUMBER, or '*=NUMBER' for every column") from None
    return pairs


def share_or_text(value: str) -> float | str:
    """Read "0.1" as a share and anything else as a condition."""
    try:
        return float(value)
    except ValueError:
        return value


def expression_or_none(name: str, value: Any) -> Any:
    """None, a condition as text, or a pyarrow compute expression."""
    if value is None or (isinstance(value, str) and value.strip()) or _is_expression(value):
        return value
    raise refuse(name, value, 'give a condition such as "weight_kg > 0", or a pyarrow.compute expression')


def share_or_expression(name: str, value: Any) -> Any:
    """None, a share above 0 and below 1, a condition as text, or a pyarrow compute expression."""
    found = as_number(value)
    if found is not None:
        if 0.0 < found < 1.0:
            return found
        raise refuse(name, value, "a share must lie above 0 and below 1")
    if value is None or (isinstance(value, str) and value.strip()) or _is_expression(value):
        return value
    raise refuse(name, value, "give a share such as 0.1, a condition as text, or a pyarrow.compute expression")


def _is_expression(value: Any) -> bool:
    kind = type(value)
    return kind.__name__ == "Expression" and kind.__module__.startswith("pyarrow")
