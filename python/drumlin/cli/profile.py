"""`drumlin profile`: look at the columns of a table."""

from __future__ import annotations

from typing import Any

import click

from drumlin.cli.output import add_common, add_options, add_rows, emit, emit_json, given_options, open_paths, prepare


@click.command("profile")
@add_rows
@add_options("profile")
@add_common
def command(rows: tuple[str, ...], as_json: bool, quiet: bool, **options: Any) -> None:
    """Look at the columns of a table.

    One read of ROWS (Parquet files, folders, globs). Shows type, gaps, range and what would harm a fit, the gravest
    first, and ends with the options to paste into a fit.
    """
    prepare(quiet=quiet)
    import drumlin

    found = drumlin.profile(open_paths(rows), **given_options(options, quiet=quiet))
    if as_json:
        emit_json(found.to_dict())
    else:
        emit(str(found))
