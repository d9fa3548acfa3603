"""`sampler bring`."""

from __future__ import annotations

import click

from sampler.cli.shared import json_option, out_option, start_options


@click.command("bring")
@click.argument("drawing", metavar="FILE", type=click.Path())
@click.option("--layer", help="Only marks on this layer; * and ? stand for any letters.")
@click.option("--name", help="Only marks of this block, cell, aperture or tool.")
@click.option("--kind", help="Only marks drawn as this kind of object.")
@click.option("--attribute", help="Only marks with this attribute.")
@click.option("--size", type=float, help="Only marks of this size, mm.")
@start_options
@out_option
@json_option
def command(drawing: str, layer: str | None, name: str | None, kind: str | None, attribute: str | None, size: float | None,
            unit: str, origin: str, panel: tuple[float, float] | None, out: str, as_json: bool) -> None:
    """Takes marks out of a DXF, GDSII, OASIS, Gerber X2 or Excellon file, and writes a layout and a study as `start` does.

    Without a selection, or with one that matches nothing, it lists what the file holds.
    """
    from sampler.cli.shared import show_start
    from sampler.files.bring.drawn import Selection
    from sampler.files.bring.read import bring
    from sampler.tasks.start import StartOptions

    selection = Selection(layer, name, kind, attribute, size)
    show_start(bring(drawing, selection, StartOptions(unit, origin, panel)), out, as_json)
