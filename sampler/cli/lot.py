"""`sampler lot`."""

from __future__ import annotations

import sys

import click

from sampler.cli.main import CANNOT_BE_MET
from sampler.cli.shared import json_option, out_option, saying, study_argument


@click.command("lot")
@study_argument
@click.option("--process", required=True, type=click.Path(), metavar="process.toml", help="What characterise wrote.")
@click.option("--panels", default=100, show_default=True, type=click.IntRange(1, 100_000), help="Panels of the lot.")
@click.option("--panel-seconds", type=click.FloatRange(0), help="Seconds to load and unload; by default the machine's.")
@click.option("--site-seconds", type=click.FloatRange(0, min_open=True), help="Seconds a site; by default the machine's.")
@out_option
@json_option
def command(study: str, process: str, panels: int, panel_seconds: float | None, site_seconds: float | None, out: str,
            as_json: bool) -> None:
    """Works out how many panels of a lot to measure, and at how many sites, so that their mean meets the limits of STUDY.

    Beside it feed-forward, which corrects each panel from its own sites. Writes lot.json and a figure. Exit status 3 when
    neither meets the limits.
    """
    from sampler.figures.lot import lot_figure
    from sampler.files.lot import lot_json, read_spread
    from sampler.files.output import write_results
    from sampler.files.study import read_study
    from sampler.report.lot import lot_summary
    from sampler.tasks.lot import lot

    asked, spread = read_study(study), read_spread(process)
    with saying() as tell:
        result = lot(asked, spread, panels, panel_s=panel_seconds, site_s=site_seconds, progress=tell)
        text = lot_json(result)
        write_results(out, {"lot.json": text, **lot_figure(result)})
    click.echo(text if as_json else lot_summary(result))
    if not result.met:
        sys.exit(CANNOT_BE_MET)
