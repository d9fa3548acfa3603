"""`sampler plan`."""

from __future__ import annotations

import sys

import click

from sampler.cli.main import CANNOT_BE_MET
from sampler.cli.shared import (
    end_progress,
    interruptible,
    json_option,
    out_option,
    progress_on_terminal,
    site_options,
    study_argument,
)


@click.command("plan")
@study_argument
@out_option
@site_options
@json_option
def command(study: str, out: str, frame: str, route: bool | None, as_json: bool) -> None:
    """Finds the fewest sites that meet every limit of STUDY, proves it, and writes plan.json, sites.csv and the map.

    Ctrl-C ends the search with the best plan so far and its bound.
    """
    from sampler.figures.map import plan_map
    from sampler.files.certificate import encode_certificate
    from sampler.files.output import plan_json, sites_csv, write_results
    from sampler.files.study import read_study
    from sampler.report.summary import plan_summary
    from sampler.tasks.plan import plan

    asked = read_study(study)
    drawn = asked.machine_stated if route is None else route
    show = progress_on_terminal()
    with interruptible() as stop:
        result = plan(asked, progress=show, stop=stop)
        end_progress(show)
        text = plan_json(result)
        files: dict[str, bytes | str] = {"plan.json": text, "sites.csv": sites_csv(result, frame),
                                         **plan_map(result, route=drawn)}
        if result.certificate:
            files["certificate.json"] = encode_certificate(result.certificate)
        write_results(out, files)
    click.echo(text if as_json else plan_summary(result))
    if result.status == "cannot":
        sys.exit(CANNOT_BE_MET)
