"""`drumlin export`: a model in the words of others."""

from __future__ import annotations

from typing import Any

import click

from drumlin.cli.output import add_model, emit, note, prepare, refuse_existing

FORMS = ("sql", "polars", "scorer", "json")


@click.command("export")
@add_model("The model to write.")
@click.option("--sql", "form", flag_value="sql", help="One query for DuckDB.")
@click.option("--polars", "form", flag_value="polars", help="Python source of a Polars expression.")
@click.option("--scorer", "form", flag_value="scorer", help="A Python file that scores rows with NumPy alone.")
@click.option("--json", "form", flag_value="json", help="Weights, means and covariances as JSON.")
@click.option("--table", metavar="NAME", help="For --sql: the table to read from.  [default: rows]")
@click.option("--files", multiple=True, metavar="PATH", help="For --sql: Parquet files to read from. May be repeated.")
@click.option("--to", "target", metavar="PATH", help="Write here instead of to standard output.")
@click.option("--replace", is_flag=True, help="Replace a file that exists.")
@click.option("--quiet", is_flag=True, help="Say nothing on standard error.")
def command(
    model: str,
    form: str | None,
    table: str | None,
    files: tuple[str, ...],
    target: str | None,
    replace: bool,
    quiet: bool,
) -> None:
    """Write a model as a query, an expression, a small program, or JSON.

    What it computes for a row are the columns that predict adds. Give one of --sql, --polars, --scorer and --json.
    """
    prepare(quiet=quiet)
    if form is None:
        raise click.UsageError("Give one of --sql, --polars, --scorer and --json.")
    if (table or files) and form != "sql":
        raise click.UsageError("--table and --files go with --sql.")
    if table and files:
        raise click.UsageError("Give --table or --files, not both.")
    if replace and target is None:
        raise click.UsageError("--replace has no effect without --to.")
    if target is not None:
        refuse_existing(target, replace=replace, flag="--to")
    import drumlin

    text = _text(drumlin.load(model), form, table, files)
    if target is None:
        emit(text.rstrip("\n"))
        return
    from drumlin.beside import write_whole

    write_whole(target, text.encode())
    note(f"written to {target}", quiet=quiet)


def _text(model: Any, form: str, table: str | None, files: tuple[str, ...]) -> str:
    from drumlin.exporting import sources

    if form == "sql":
        return str(model.as_sql(table or "rows", files=list(files) or None))
    if form == "json":
        return sources.json_text(model.mixture, model._codes(), model.names)
    write = sources.polars_source if form == "polars" else sources.scorer_source
    return write(model.mixture, model._codes())
