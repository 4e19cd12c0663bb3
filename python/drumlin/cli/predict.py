"""`drumlin predict`: give every row its component."""

from __future__ import annotations

import sys
from typing import Any

import click

from drumlin.cli.output import (
    add_common,
    add_model,
    add_options,
    add_rows,
    emit,
    emit_json,
    given_options,
    open_paths,
    prepare,
)
from drumlin.errors import OptionError


@click.command("predict")
@add_rows
@add_model("The model to apply.")
@click.option("--to", metavar="PATH", help="Write Parquet here; without it an Arrow stream goes to standard output.")
@add_options("predict")
@add_common
def command(rows: tuple[str, ...], model: str, to: str | None, as_json: bool, quiet: bool, **options: Any) -> None:
    """Give every row its component, how sure that is, the runner-up, and how dense the model is there.

    ROWS are Parquet files, folders or globs. Every column is carried along.
    """
    prepare(quiet=quiet)
    import drumlin

    if to is None:
        if as_json:
            raise OptionError("--json sums up what was written: give --to PATH too.", option="to")
        if sys.stdout.isatty():
            raise OptionError(
                "Without --to the result is an Arrow stream, which is not for a terminal: give --to PATH, or redirect.",
                option="to",
            )
    given = given_options(options, quiet=quiet)
    result = drumlin.predict(open_paths(rows), model, to, **given)
    if to is None:
        _stream(result)
    elif as_json:
        emit_json(result.to_dict())
    else:
        emit(str(result))


def _stream(result: Any) -> None:
    """Write a record batch stream to standard output in the Arrow streaming format."""
    import pyarrow as pa

    reader = pa.RecordBatchReader.from_stream(result) if not isinstance(result, pa.RecordBatchReader) else result
    out = sys.stdout.buffer
    with pa.ipc.new_stream(out, reader.schema) as writer:
        for batch in reader:
            writer.write_batch(batch)
    out.flush()
