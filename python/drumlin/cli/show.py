"""`drumlin show`: explain a model."""

from __future__ import annotations

import click

from drumlin.cli.output import add_common, add_model, emit, emit_json, prepare


@click.command("show")
@add_model("The model to show.")
@add_common
def command(model: str, as_json: bool, quiet: bool) -> None:
    """Explain a model: its figures, a card per component, its notes.

    With --json also means, covariances and the record of the fit.
    """
    prepare(quiet=quiet)
    import drumlin
    from drumlin.cli.fit import model_dict, model_page

    found = drumlin.load(model)
    if as_json:
        emit_json(model_dict(found))
    else:
        emit(model_page(found, notes=True))
