"""`sampler verify`."""

from __future__ import annotations

import sys

import click

from sampler.cli.main import CANNOT_BE_MET
from sampler.cli.shared import json_option, out_option, saying


@click.command("verify")
@click.argument("plan", metavar="PLAN", type=click.Path())
@click.option("--pilot", type=click.Path(), metavar="PILOT.csv", help="Densely measured panels to hold the plan against.")
@click.option("--panels", default=2000, show_default=True, type=click.IntRange(50, 1_000_000), help="Simulated panels.")
@click.option("--lacks", type=click.FloatRange(0, min_open=True), metavar="UM",
              help="Amplitude of each term of the next order, for the bias it would put on the corrections.")
@click.option("--seed", default=1, show_default=True, help="Seed of the simulation.")
@out_option
@json_option
def command(plan: str, pilot: str | None, panels: int, lacks: float | None, seed: int, out: str, as_json: bool) -> None:
    """Checks what a plan claims by simulated panels, and on pilot panels, without anything of the search.

    Writes verify.json and a figure. Exit status 3 when the plan fails.
    """
    from sampler.figures.verify import verify_figure
    from sampler.files.output import write_results
    from sampler.files.plan import read_plan
    from sampler.files.readings import read_readings
    from sampler.files.study import read_study
    from sampler.files.verify import claims_of, findings, stops_of, verify_json
    from sampler.report.verify import verify_text
    from sampler.tasks.verify import verify

    written = read_plan(plan)
    study = read_study(written.study_path())
    sites, claims = written.sites_of(study), claims_of(written, study)
    readings = None if pilot is None else read_readings(pilot, study.layout)
    with saying() as tell:
        result = verify(study, sites, claims, panels=panels, seed=seed, lacks_um=lacks, pilot=readings, stop=stops_of(written),
                        progress=tell)
        text = verify_json(written, result)
        write_results(out, {"verify.json": text, **verify_figure(result)})
    click.echo(text if as_json else verify_text(result.summary, findings(result), result.notes))
    if not result.held:
        sys.exit(CANNOT_BE_MET)
