"""`sampler characterise`."""

from __future__ import annotations

import click

from sampler.cli.shared import json_option, out_option, saying


@click.command("characterise")
@click.argument("pilot", metavar="PILOT.csv", type=click.Path())
@click.option("--study", required=True, type=click.Path(), metavar="STUDY", help="The study whose layout was measured.")
@click.option("--seed", default=1, show_default=True, help="Seed of permutations and simulated intervals.")
@out_option
@json_option
def command(pilot: str, study: str, seed: int, out: str, as_json: bool) -> None:
    """Takes densely measured pilot panels apart into model, noise, variation and read rates, and writes process.toml.

    A study takes the result by one line, process = "process.toml". Also written: characterise.json, outliers.csv and figures.
    """
    from sampler.figures.estimation import characterise_figures
    from sampler.files.characterise import characterise_json, outliers_csv
    from sampler.files.output import write_results
    from sampler.files.process import process_toml
    from sampler.files.readings import read_readings
    from sampler.files.study import read_study
    from sampler.report.characterise import characterise_summary
    from sampler.tasks.characterise import characterise

    asked = read_study(study)
    with saying() as tell:
        tell("reading the pilot")
        readings = read_readings(pilot, asked.layout)
        result = characterise(asked.layout, readings, asked.noise, seed=seed, progress=tell)
        text = characterise_json(result)
        tell("drawing")
        write_results(out, {"characterise.json": text, "process.toml": process_toml(result),
                            "outliers.csv": outliers_csv(result.outliers), **characterise_figures(result)})
    click.echo(text if as_json else characterise_summary(result))
