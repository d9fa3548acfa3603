"""`sampler budget`."""

from __future__ import annotations

import sys

import click

from sampler.cli.main import CANNOT_BE_MET
from sampler.cli.shared import json_option


@click.command("budget")
@click.argument("budget", metavar="BUDGET.toml", type=click.Path())
@click.option("--plan", "plan", type=click.Path(), metavar="PLAN.json", help="A plan or audit, to say which pad it supports.")
@click.option("--out", type=click.Path(), metavar="DIR", help="Folder for budget.json and the figure.")
@json_option
def command(budget: str, plan: str | None, out: str | None, as_json: bool) -> None:
    """Works out from pad, via and contributors which position limit is left for sampling, and what a plan supports.

    Exit status 3 when the budget is spent before any mark is measured, or the plan does not fit it.
    """
    from sampler.files.budget import budget_json, read_budget, read_position
    from sampler.files.output import write_results
    from sampler.report.budget import budget_summary
    from sampler.tasks.budget import budget as work_out

    asked = read_budget(budget)
    k_u_um, factor = read_position(plan) if plan is not None else (None, None)
    result = work_out(asked, k_u_um, factor)
    text = budget_json(result)
    if out is not None:
        from sampler.figures.budget import budget_figure

        write_results(out, {"budget.json": text, **budget_figure(result)})
    click.echo(text if as_json else budget_summary(result))
    if not result.fits:
        sys.exit(CANNOT_BE_MET)
