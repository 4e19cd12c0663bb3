"""`drumlin demo`: run the whole job on generated parcel scans."""

from __future__ import annotations

import click

from drumlin.cli.output import prepare


@click.command("demo")
@click.option(
    "--rows",
    type=click.IntRange(10_000),
    default=2_000_000,
    show_default=True,
    metavar="COUNT",
    help="Parcel scans to make.",
)
@click.option(
    "--dir", "folder", metavar="FOLDER", help="Work in this new or empty folder and keep it; else in a temporary one."
)
@click.option("--keep", is_flag=True, help="Keep the temporary folder.")
@click.option(
    "--memory", default="600 MB", show_default=True, metavar="SIZE", help="Ceiling of memory for fit and predict."
)
@click.option("--threads", type=click.IntRange(1, 1024), metavar="COUNT", help="Threads that compute.")
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), default=0, show_default=True, metavar="NUMBER", help="Seed.")
@click.option("--json", "as_json", is_flag=True, help="Write the figures as JSON.")
@click.option("--quiet", is_flag=True, help="No progress on standard error.")
def command(
    rows: int, folder: str | None, keep: bool, memory: str, threads: int | None, seed: int, as_json: bool, quiet: bool
) -> int:
    """Run the whole job on generated parcel scans, and check it.

    Writes the files of an invented parcel depot, looks at the columns, fits the kinds of parcel, gives every parcel
    its kind, and compares with the truth. Ends with exit code 1 when the kinds are not found as well as the true law
    would find them, or when one and two threads give different models.
    """
    prepare(quiet=True)
    from drumlin.demo.run import run_demo

    return run_demo(
        rows, folder=folder, keep=keep, memory=memory, threads=threads, seed=seed, as_json=as_json, quiet=quiet
    )
