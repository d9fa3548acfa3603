"""`sampler start`."""

from __future__ import annotations

import click

from sampler.cli.shared import json_option, out_option, start_options


@click.command("start")
@click.argument("marks", metavar="MARKS.csv", type=click.Path())
@click.option("--x", help="The column of x: its heading, or its number from 1.")
@click.option("--y", help="The column of y.")
@click.option("--id", "id_column", help="The column of the marks' names.")
@start_options
@out_option
@json_option
def command(marks: str, x: str | None, y: str | None, id_column: str | None, unit: str, origin: str,
            panel: tuple[float, float] | None, out: str, as_json: bool) -> None:
    """Writes a layout and a commented study, ready to run, from a bare table of marks, and says everything it guessed."""
    from sampler.cli.shared import show_start
    from sampler.files.start import read_start
    from sampler.tasks.start import StartOptions

    show_start(read_start(marks, StartOptions(unit, origin, panel, x, y, id_column)), out, as_json)
