"""The command `drumlin`: finds the subcommand, and turns every error into one line and an exit code.

Exit codes: 0 done, 1 failed, 2 wrong use, 3 limits crossed, 4 columns not as needed, 5 damaged model file, 130
interrupted.
"""

from __future__ import annotations

import importlib
import os
import signal
import sys
import threading
from collections.abc import Sequence
from typing import Any, NoReturn

import click

from drumlin.errors import DrumlinError, OptionError

__all__ = ["command", "main", "run"]

COMMANDS = {
    "profile": "Look at the columns of a table.",
    "fit": "Fit a mixture and write the model.",
    "show": "Explain a model.",
    "name": "Give the components of a model names.",
    "predict": "Give every row its component.",
    "export": "Write a model as SQL, a Polars expression, a small program, or JSON.",
    "demo": "Run the whole job on generated parcel scans.",
}

FAILED, USAGE, INTERRUPTED, TERMINATED = 1, 2, 130, 143


class Commands(click.Group):
    """Subcommands that are loaded when they are asked for."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"drumlin.cli.{cmd_name}")
        found: click.Command = module.command
        return found

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        from drumlin.errors import nearest

        if args and not args[0].startswith("-") and args[0] not in COMMANDS:
            hint = nearest(args[0], COMMANDS)
            raise click.UsageError(f"There is no command {args[0]!r}.{hint} Commands: {', '.join(COMMANDS)}.", ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


def _version(ctx: click.Context, _option: click.Parameter, value: bool) -> None:
    if value and not ctx.resilient_parsing:
        import drumlin

        click.echo(f"drumlin {drumlin.__version__}")
        ctx.exit()


@click.group(cls=Commands, context_settings={"help_option_names": ["--help"], "max_content_width": 100})
@click.option("--version", is_flag=True, is_eager=True, expose_value=False, callback=_version, help="Show the version.")
def command() -> None:
    """Find the soft groups of tables that are larger than memory.

    Rows are Parquet files, folders or globs; everything else is a flag. Results go to standard output, progress and
    notes to standard error. "drumlin COMMAND --help" explains a command.
    """


def run(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code; nothing is raised and no traceback is shown.

    The environment variable DRUMLIN_TRACEBACK=1 shows where an error came from.
    """
    try:
        _end_cleanly_when_terminated()
        result: Any = command.main(
            args=None if arguments is None else list(arguments), prog_name="drumlin", standalone_mode=False
        )
        sys.stdout.flush()
        return result if isinstance(result, int) else 0
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.format_message(), err=True)
        return USAGE
    except click.ClickException as error:
        _complain(error.format_message(), _hint(error))
        return error.exit_code
    except (KeyboardInterrupt, click.Abort):
        _complain("interrupted; nothing was written.")
        return INTERRUPTED
    except BrokenPipeError:
        # The reader of our output has gone: say nothing, and keep the interpreter from saying something at its end.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAILED
    except DrumlinError as error:
        _show_traceback()
        hint = "Try 'drumlin --help'." if isinstance(error, OptionError) and not str(error) else ""
        _complain(str(error), hint)
        return error.exit_code
    except MemoryError:
        _show_traceback()
        _complain("not enough memory. Lower --memory or --threads.")
        return FAILED
    except OSError as error:
        _show_traceback()
        place = f"{error.filename}: " if error.filename else ""
        _complain(f"{place}{error.strerror or error}")
        return FAILED
    except SystemExit as end:
        return end.code if isinstance(end.code, int) else FAILED
    except Exception as error:
        _show_traceback()
        _complain(
            f"an unexpected fault, {type(error).__name__}: {error}",
            "Please report it. DRUMLIN_TRACEBACK=1 in the environment shows where it happened.",
        )
        return FAILED


def main() -> NoReturn:
    """The entry point of the installed command."""
    sys.exit(run())


def _hint(error: click.ClickException) -> str:
    context = getattr(error, "ctx", None)
    return f"Try '{context.command_path} --help'." if context is not None else ""


def _complain(message: str, hint: str = "") -> None:
    """Write one line to standard error."""
    line = " ".join(f"{message} {hint}".split())
    click.echo(f"drumlin: {line}", err=True)


def _show_traceback() -> None:
    if os.environ.get("DRUMLIN_TRACEBACK") == "1":
        import traceback

        traceback.print_exc()


def _end_cleanly_when_terminated() -> None:
    """Let a polite kill unwind like an interrupt, so that no half-written file stays behind."""
    if threading.current_thread() is threading.main_thread() and signal.getsignal(signal.SIGTERM) is signal.SIG_DFL:
        signal.signal(signal.SIGTERM, _terminate)


def _terminate(_number: int, _frame: Any) -> NoReturn:
    raise SystemExit(TERMINATED)


if __name__ == "__main__":
    main()
