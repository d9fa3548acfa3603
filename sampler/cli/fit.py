"""`sampler fit`."""

from __future__ import annotations

import sys

import click

from sampler.cli.main import CANNOT_BE_MET
from sampler.cli.shared import json_option, out_option, saying


@click.command("fit")
@click.argument("plan_or_study", metavar="PLAN_OR_STUDY", type=click.Path())
@click.argument("measured", metavar="MEASURED.csv", type=click.Path())
@click.option("--predict", is_flag=True, help="Also write predicted.csv: the displacement at every mark of every panel.")
@out_option
@json_option
def command(plan_or_study: str, measured: str, predict: bool, out: str, as_json: bool) -> None:
    """Turns measured panels into corrections with their uncertainty, and says whether limits, noise and model still hold.

    PLAN_OR_STUDY is a plan.json, its folder, or a study file. Exit status 3 when a panel misses a limit, or when the noise or
    the model no longer holds.
    """
    from sampler.figures.estimation import term_charts
    from sampler.files.characterise import outliers_csv
    from sampler.files.fit import corrections_csv, fit_json, limits_csv, predicted_csv, residuals_csv
    from sampler.files.output import write_results
    from sampler.files.plan import planned
    from sampler.files.readings import read_readings
    from sampler.report.fit import fit_summary
    from sampler.tasks.fit import fit

    study, sites = planned(plan_or_study)
    with saying() as tell:
        tell("reading the panels")
        readings = read_readings(measured, study.layout)
        tell("fitting")
        result = fit(study, readings, sites)
        text = fit_json(result)
        tell("writing")
        files: dict[str, bytes | str] = {
            "fit.json": text, "corrections.csv": corrections_csv(result), "limits.csv": limits_csv(result),
            "residuals.csv": residuals_csv(result), "outliers.csv": outliers_csv(result.outliers), **term_charts(result)}
        if predict:
            files["predicted.csv"] = predicted_csv(result)
        write_results(out, files)
    click.echo(text if as_json else fit_summary(result))
    if not (result.meets_limits.all() and result.holds):
        sys.exit(CANNOT_BE_MET)
