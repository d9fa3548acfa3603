"""`sampler replan`."""

from __future__ import annotations

import sys

import click

from sampler.cli.main import CANNOT_BE_MET
from sampler.cli.shared import end_progress, interruptible, json_option, out_option, progress_on_terminal


@click.command("replan")
@click.argument("plan", metavar="PLAN", type=click.Path())
@click.option("--layout", required=True, type=click.Path(), metavar="NEW.toml", help="The layout as it is now.")
@click.option("--study", "study", type=click.Path(), metavar="STUDY", help="Another study; by default the plan's own.")
@click.option("--fewest-new", is_flag=True, help="The fewest new sites, instead of the fewest sites with the most kept.")
@click.option("--most-new", type=click.IntRange(min=0), metavar="N", help="At most N new sites.")
@click.option("--tolerance-mm", type=click.FloatRange(min=0), default=0.05, show_default=True,
              help="How far a mark may lie from its old place and still count as there.")
@out_option
@json_option
def command(plan: str, layout: str, study: str | None, fewest_new: bool, most_new: int | None, tolerance_mm: float, out: str,
            as_json: bool) -> None:
    """Plans again for a changed layout: the fewest sites, and among those the most that PLAN already has.

    Writes the new plan with its certificate, the study it stands on, change.csv and a map of the change.
    """
    from sampler.figures.change import change_map
    from sampler.figures.map import plan_map
    from sampler.files.certificate import encode_certificate
    from sampler.files.output import sites_csv, write_results
    from sampler.files.plan import read_plan
    from sampler.files.replan import old_sites, replan_files, replan_json, study_on
    from sampler.report.replan import replan_summary
    from sampler.tasks.replan import replan

    old = read_plan(plan)
    ids, own_mm = old_sites(old)
    asked, text = study_on(study or old.study_path(), layout, out)
    show = progress_on_terminal()
    with interruptible() as stop:
        result = replan(asked, ids, own_mm, fewest_new=fewest_new, most_new=most_new, tolerance_mm=tolerance_mm, progress=show,
                        stop=stop)
        end_progress(show)
        files: dict[str, bytes | str] = {**replan_files(result, text), "sites.csv": sites_csv(result.plan),
                                         **plan_map(result.plan), **change_map(result)}
        if result.plan.certificate:
            files["certificate.json"] = encode_certificate(result.plan.certificate)
        write_results(out, files)
    click.echo(replan_json(result) if as_json else replan_summary(result))
    if result.plan.status == "cannot":
        sys.exit(CANNOT_BE_MET)
