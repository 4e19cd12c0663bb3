"""What the commands share: flags made from the option definitions, and where results and notes go."""

from __future__ import annotations

import json
import logging
import math
from collections.abc import Callable, Iterable
from typing import Any, TypeVar

import click

from drumlin.errors import DrumlinError, OptionError, TargetError
from drumlin.options import OTHER_DEFAULTS, Flag, flags

__all__ = [
    "add_common",
    "add_model",
    "add_options",
    "add_rows",
    "emit",
    "emit_json",
    "given_options",
    "open_paths",
    "prepare",
]

Command = TypeVar("Command", bound=Callable[..., Any])


class Read(click.ParamType[Any]):
    """Turns the text after a flag into the option's value; what the value may be is checked by the option itself."""

    def __init__(self, flag: Flag) -> None:
        self.name = flag.name
        self._flag = flag

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        if not isinstance(value, str):
            return value
        try:
            return self._flag.read(value)
        except DrumlinError as error:
            self.fail(str(error), param, ctx)
        except ValueError:
            wanted = {int: "a whole number", float: "a number"}.get(
                self._flag.read, self._flag.metavar or "another value"
            )  # type: ignore[call-overload]
            self.fail(f"{value!r} is not {wanted}.", param, ctx)


def add_options(verb: str, *, leave_out: Iterable[str] = ()) -> Callable[[Command], Command]:
    """Give a command the flags of a verb, in the order of its options. A flag that is not written is not passed on."""
    unwanted = set(leave_out)
    wanted = [flag for flag in flags(verb) if flag.name not in unwanted]

    def decorate(function: Command) -> Command:
        for flag in reversed(wanted):
            function = _option(verb, flag)(function)
        return function

    return decorate


def _option(verb: str, flag: Flag) -> Callable[[Command], Command]:
    default = OTHER_DEFAULTS.get((verb, flag.name), flag.default)
    if flag.switch:
        off = "--no-" + flag.flag.removeprefix("--")
        name = f"{flag.flag}/{off}" if default else flag.flag
        return click.option(name, flag.name, is_flag=True, default=None, help=flag.help)
    told = f"{flag.help}  [default: {default}]" if default not in (None, ()) else flag.help
    metavar = "|".join(flag.choices) or flag.metavar or None
    if flag.multiple:
        told += " May be repeated."
        return click.option(flag.flag, flag.name, multiple=True, default=None, metavar=metavar, help=told)
    return click.option(flag.flag, flag.name, type=Read(flag), default=None, metavar=metavar, help=told)


def add_rows(function: Command) -> Command:
    """Give a command its positionals: the paths of the rows."""
    return click.argument("rows", nargs=-1, required=True, metavar="ROWS...")(function)


def add_model(text: str) -> Callable[[Command], Command]:
    """Give a command the flag that names the model file."""
    return click.option("--model", "model", required=True, metavar="PATH", help=text)


def add_common(function: Command) -> Command:
    """Give a command --json and --quiet."""
    function = click.option("--quiet", is_flag=True, help="No progress and no notes on standard error.")(function)
    return click.option("--json", "as_json", is_flag=True, help="Write the result as JSON.")(function)


def given_options(options: dict[str, Any], *, quiet: bool) -> dict[str, Any]:
    """Return the options that were written on the command line, progress off when quiet."""
    given = {name: value for name, value in options.items() if value is not None and value != ()}
    given = {name: list(value) if isinstance(value, tuple) else value for name, value in given.items()}
    if quiet:
        if given.get("progress"):
            raise OptionError("--progress and --quiet say opposite things: give one of them.", option="progress")
        if "progress" in options:
            given["progress"] = False
    return given


def open_paths(rows: tuple[str, ...]) -> str | list[str]:
    """Return one path as it is and several as a list, as the verbs take them."""
    return rows[0] if len(rows) == 1 else list(rows)


def refuse_existing(path: str, *, replace: bool, flag: str) -> None:
    """Raise TargetError before any work when a target is in the way."""
    import os

    if os.path.lexists(path) and not replace:
        raise TargetError(f"{path} exists. Choose another {flag}, or give --replace.", file=path)
    folder = os.path.dirname(os.path.abspath(path))
    if not os.path.isdir(folder):
        raise TargetError(f"{path} cannot be written: there is no folder {folder}. Make it first.", file=path)
    if not os.access(folder, os.W_OK):
        raise TargetError(f"{path} cannot be written: the folder {folder} is not writable.", file=path)


class _Notes(logging.Handler):
    """Writes log records of the package as notes to standard error."""

    def emit(self, record: logging.LogRecord) -> None:
        try:
            click.echo(f"note: {record.getMessage()}", err=True)
        except Exception:
            self.handleError(record)


def prepare(*, quiet: bool) -> None:
    """Send the notes that the package logs to standard error until the command ends; to nowhere when quiet."""
    if quiet:
        return
    logger = logging.getLogger("drumlin")
    handler, level = _Notes(level=logging.INFO), logger.level
    logger.addHandler(handler)
    logger.setLevel(logging.INFO)

    def undo() -> None:
        logger.removeHandler(handler)
        logger.setLevel(level)

    click.get_current_context().call_on_close(undo)


def emit(text: str) -> None:
    """Write a result as text to standard output."""
    click.echo(text)


def note(text: str, *, quiet: bool = False) -> None:
    """Write a remark to standard error."""
    if not quiet:
        click.echo(text, err=True)


def emit_json(value: Any) -> None:
    """Write a result as JSON to standard output; NaN and infinities become null, NumPy numbers plain ones."""
    click.echo(json.dumps(_plain(value), indent=2, ensure_ascii=False, allow_nan=False))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(name): _plain(one) for name, one in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(one) for one in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, str | bool | int):
        return value
    return _plain(value.tolist()) if hasattr(value, "tolist") else str(value)
