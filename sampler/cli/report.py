"""`sampler report`."""

from __future__ import annotations

import click

from sampler.cli.shared import json_option


@click.command("report")
@click.argument("folder", metavar="DIR", type=click.Path())
@click.option("--out", type=click.Path(), metavar="DIR", help="Folder for report.html; by default the plan's own.")
@json_option
def command(folder: str, out: str | None, as_json: bool) -> None:
    """Makes one HTML page of the plan in DIR, with its verification if that lies there too.

    The page needs nothing else: it opens from disk, offline, and prints. Everything on it is computed again from the sites.
    """
    import shlex

    from sampler import __version__
    from sampler.files.output import json_text, write_results
    from sampler.files.page import claims_of, read_verdict
    from sampler.files.plan import read_plan
    from sampler.files.study import read_study
    from sampler.report.page import page_html
    from sampler.tasks.question import question
    from sampler.tasks.review import recalled, review

    plan = read_plan(folder)
    study = read_study(plan.study_path())
    verdict = read_verdict(plan.path.parent)
    asked = question(study)
    again = f"sampler plan {shlex.quote(plan.study.path)} --out {shlex.quote(plan.path.parent.as_posix())}"
    page = review(recalled(study, plan.ids, claims_of(plan, study), asked), verdict=verdict, command=again,
                  version=__version__, asked=asked)
    where = out or plan.path.parent.as_posix()
    html = page_html(page)
    write_results(where, {"report.html": html})
    said = f"{where}/report.html: {page.plan.answer}; {len(html.encode()) / 1e6:.2f} MB"
    click.echo(json_text({"report": f"{where}/report.html", "answer": page.plan.answer,
                          "verified": None if verdict is None else verdict.held}) if as_json else said)
