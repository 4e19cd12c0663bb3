"""`drumlin name`: give the components of a model names."""

from __future__ import annotations

import click

from drumlin.cli.output import add_common, add_model, emit, emit_json, note, prepare, refuse_existing
from drumlin.errors import OptionError


@click.command("name")
@add_model("The model whose components get names.")
@click.option(
    "--names", required=True, metavar="ID=NAME,ID=NAME,...", help="Names by component id; ID= takes one away."
)
@click.option("--to", metavar="PATH", help="Write the named model here; without it, --replace changes --model itself.")
@click.option("--replace", is_flag=True, help="Replace a model file that exists.")
@add_common
def command(model: str, names: str, to: str | None, replace: bool, as_json: bool, quiet: bool) -> None:
    """Give the components of a model names that go with it from now on.

    Names belong to component ids, as "drumlin show" lists them. Names given before stay unless replaced.
    """
    prepare(quiet=quiet)
    import drumlin
    from drumlin.cli.fit import model_dict
    from drumlin.reporting.cards import cards_text

    if to is None and not replace:
        raise OptionError(
            "Give --to PATH for the named model, or --replace to change the model file itself.", option="to"
        )
    target = to if to is not None else model
    refuse_existing(target, replace=replace, flag="--to")
    named = drumlin.load(model).with_names(read_names(names))
    written = named.save(target, replace=replace)
    if as_json:
        emit_json(model_dict(named))
    else:
        emit(cards_text(named))
    note(f"model written to {written}", quiet=quiet)


def read_names(text: str) -> dict[int, str]:
    """Read "0=flat packets,1=tubes" into {0: "flat packets", 1: "tubes"}; OptionError when it is something else.

    >>> read_names("0=flat packets, 1=boxes, big, 2=")
    {0: 'flat packets', 1: 'boxes, big', 2: ''}
    """
    import re

    found: dict[int, str] = {}
    for part in re.split(r",(?=\s*\d+\s*=)", text):
        component, equals, name = part.partition("=")
        if not equals or not component.strip().isdigit():
            raise OptionError(
                f"names: {part.strip()!r} is not ID=NAME. Write for example 0=flat packets,1=tubes.", option="names"
            )
        number = int(component)
        if number in found:
            raise OptionError(f"names: component {number} is named twice.", option="names")
        found[number] = name.strip()
    return found
