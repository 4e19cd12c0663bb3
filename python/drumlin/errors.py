"""The errors that drumlin raises.

Every error derives from `DrumlinError` and from a built-in, so that `except ValueError` and `except OSError` work as
usual. A message names the column, the row, the file or the option, says what was found, and says what to do. `facts`
holds the same things for programs.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Mapping, Sequence
from typing import Any, ClassVar

__all__ = [
    "DamagedFileError",
    "DataError",
    "DrumlinError",
    "InternalError",
    "MixtureError",
    "OptionError",
    "SchemaError",
    "SourceError",
    "StreamError",
    "TargetError",
    "name_columns",
    "nearest",
]


class DrumlinError(Exception):
    """The base of every error that drumlin raises on purpose.

    Attributes: `exit_code`, what the command line ends with; `facts`, the column, row, file or option concerned.

    >>> import drumlin
    >>> try:
    ...     drumlin.load("nowhere.drumlin")
    ... except drumlin.DrumlinError as error:
    ...     print(type(error).__name__, error.exit_code)
    SourceError 1
    """

    exit_code: ClassVar[int] = 1
    facts: dict[str, Any]

    def __init__(self, message: str = "", known: Mapping[str, Any] | None = None, /, **facts: Any) -> None:
        super().__init__(message)
        self.facts = {**(known or {}), **facts}

    def __str__(self) -> str:
        return str(self.args[0]) if self.args else ""


class OptionError(DrumlinError, ValueError):
    """An option has a value that is not allowed, or is given where it has no effect. Raised before data are touched."""

    exit_code = 2


class SchemaError(DrumlinError, ValueError):
    """The columns of a table are not those needed: one is missing, has a type that cannot be used, or clashes."""

    exit_code = 4


class DataError(DrumlinError, ValueError):
    """The values of a table cannot be used as they are: gaps, infinities, bad weights, too few rows."""


class MixtureError(DrumlinError, ValueError):
    """Numbers that are not a mixture: weights that do not sum to 1, a covariance that is not positive definite."""


class StreamError(DrumlinError, ValueError):
    """A stream that can be read only once was given where several reads are needed, or changed between reads."""


class SourceError(DrumlinError, OSError):
    """A source cannot be found or read: a missing or corrupt file."""


class TargetError(DrumlinError, OSError):
    """A target cannot be written: it exists already, or the place is not writable."""


class DamagedFileError(DrumlinError, ValueError):
    """A model file is truncated, edited, of a newer format, or not a model file at all."""

    exit_code = 5


class InternalError(DrumlinError, RuntimeError):
    """A fault of drumlin itself. Please report it with the message."""


def nearest(name: str, names: Iterable[str]) -> str:
    """Return " Did you mean 'x'?" for the name most like `name`, or "" when none is.

    >>> nearest("lenght", ["length", "width"])
    " Did you mean 'length'?"
    >>> nearest("price", ["length", "width"])
    ''
    """
    known = list(dict.fromkeys(names))
    by_lower = {other.lower(): other for other in reversed(known)}
    found = difflib.get_close_matches(name.lower(), list(by_lower), n=1, cutoff=0.6)
    return f" Did you mean {by_lower[found[0]]!r}?" if found else ""


def name_columns(error: DrumlinError, columns: Sequence[str]) -> DrumlinError:
    """Return an error of the same kind in which the core's "column 3" is the column's name.

    The core knows columns by position only where it is given bare arrays. Any other error is returned as it is.
    """
    position = error.facts.get("column")
    if isinstance(position, bool) or not isinstance(position, int) or not 0 <= position < len(columns):
        return error
    name = columns[position]
    text = re.sub(rf"\bcolumn (number )?{position}\b", lambda _: f"column {name!r}", str(error), count=1)
    return type(error)(text, {**error.facts, "column": name})
