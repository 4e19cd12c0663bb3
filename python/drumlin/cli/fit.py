"""`drumlin fit`: fit a mixture and write the model."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from drumlin.cli.output import (
    add_common,
    add_options,
    add_rows,
    emit,
    emit_json,
    given_options,
    note,
    open_paths,
    prepare,
    refuse_existing,
)

if TYPE_CHECKING:
    from drumlin.model import Model


@click.command("fit")
@add_rows
@click.option(
    "--components",
    required=True,
    metavar="COUNT|MODEL",
    help="Number of components, or a model file to start from.",
)
@click.option("--model", "target", metavar="PATH", help="Write the model here (ends in .drumlin).")
@click.option("--dry-run", is_flag=True, help="Only tell rows, memory and seconds a pass; nothing is fitted.")
@click.option("--replace", is_flag=True, help="Replace a model file that exists.")
@add_options("fit")
@add_common
def command(
    rows: tuple[str, ...],
    components: str,
    target: str | None,
    dry_run: bool,
    replace: bool,
    as_json: bool,
    quiet: bool,
    **options: Any,
) -> int:
    """Fit a mixture to ROWS and write the model.

    ROWS are Parquet files, folders or globs, read several times within a bounded memory. Shows a card per component.
    With --on-interrupt best Ctrl-C writes the best model so far; the exit code is 130 all the same.
    """
    prepare(quiet=quiet)
    import drumlin
    from drumlin.cli.main import INTERRUPTED

    given = given_options(options, quiet=quiet)
    start: Any = _whole(components)
    start = drumlin.load(components) if start is None else start
    if dry_run:
        found = drumlin.estimate(open_paths(rows), start, **given)
        emit_json(found.to_dict()) if as_json else emit(str(found))
        return 0
    if target is None:
        raise click.UsageError("Missing option '--model': the file to write the model to.")
    refuse_existing(target, replace=replace, flag="--model")
    model = drumlin.fit(open_paths(rows), start, **given)
    written = model.save(target, replace=replace)
    if as_json:
        emit_json(model_dict(model))
    else:
        emit(model_page(model, notes=False))  # the notes went to standard error as they arose
    note(f"model written to {written}", quiet=quiet)
    return INTERRUPTED if model.stopped == "interrupt" else 0


def _whole(text: str) -> int | None:
    try:
        return int(text)
    except ValueError:
        return None


def model_page(model: Model, *, notes: bool) -> str:
    """Return what `fit` and `show` print of a model: its figures, its cards, and its notes where they are wanted."""
    from drumlin.reporting.cards import cards_text, figures_text

    parts = [figures_text(model), "", cards_text(model)]
    if notes and model.notes:
        parts += ["", *(f"note: {one}" for one in model.notes)]
    return "\n".join(parts)


def model_dict(model: Model) -> dict[str, Any]:
    """Return what `fit` and `show` write of a model as JSON."""
    mixture = model.mixture
    return {
        "checksum": model.checksum,
        "columns": list(model.columns),
        "structure": mixture.structure,
        "pooled": mixture.pooled,
        "rows": model.rows,
        "weight": model.weight,
        "log_likelihood": model.log_likelihood,
        "held_log_likelihood": model.held_log_likelihood,
        "bic": model.bic,
        "aic": model.aic,
        "icl": model.icl,
        "passes": model.passes,
        "stopped": model.stopped,
        "notes": list(model.notes),
        "missing": model.missing,
        "missing_codes": {name: list(values) for name, values in model.missing_codes.items()},
        "components": model.cards(),
        "means": mixture.means.tolist(),
        "covariances": mixture.covariances.tolist(),
        "record": model.record,
    }
