"""`sampler certify`."""

from __future__ import annotations

import click

from sampler.cli.shared import json_option


@click.command("certify")
@click.argument("folder", metavar="DIR", type=click.Path())
@json_option
def command(folder: str, as_json: bool) -> None:
    """Proves the plan in DIR again: re-reads study and layout, recomputes every limit, and walks the certificate.

    Nothing of the search takes part, and the arithmetic rounds to the safe side. Says in one sentence what is proven; a plan,
    study, layout or certificate that was altered is refused, with the place, and exit status 1.
    """
    from sampler.files.certificate import certified_json, read_certificate
    from sampler.files.plan import read_plan
    from sampler.files.study import read_study
    from sampler.tasks.certify import certify

    plan = read_plan(folder)
    result = certify(read_study(plan.study_path()), plan.values, read_certificate(plan.path.parent))
    click.echo(certified_json(result) if as_json else result.sentence)
