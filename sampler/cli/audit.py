"""`sampler audit`."""

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


@click.command("audit")
@study_argument
@click.option("--sites", required=True, type=click.Path(), metavar="FILE.csv",
              help="The sites to audit: a CSV with an id column.")
@out_option
@site_options
@json_option
def command(study: str, sites: str, out: str, frame: str, route: bool | None, as_json: bool) -> None:
    """Tells what the sites of FILE.csv achieve under STUDY, and how far they are from the fewest.

    Exit status 3 when the sites miss a limit.
    """
    from sampler.figures.map import audit_map
    from sampler.files.output import audit_json, sites_csv, write_results
    from sampler.files.study import read_study
    from sampler.files.table import read_site_ids
    from sampler.report.summary import audit_summary
    from sampler.tasks.audit import audit

    asked = read_study(study)
    ids = read_site_ids(sites)
    drawn = asked.machine_stated if route is None else route
    show = progress_on_terminal()
    with interruptible() as stop:
        result = audit(asked, ids, progress=show, stop=stop)
        end_progress(show)
        text = audit_json(result)
        write_results(out, {"audit.json": text, "sites.csv": sites_csv(result, frame), **audit_map(result, route=drawn)})
    click.echo(text if as_json else audit_summary(result))
    if not result.audit.meets_limits:
        sys.exit(CANNOT_BE_MET)
