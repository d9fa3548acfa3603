"""The command line: one command per file, loaded only when it is used."""

from __future__ import annotations

import importlib
import sys

import click

from sampler import __version__
from sampler.errors import CertificateError, SamplerError

COMMANDS = {
    "plan": "the fewest sites that meet a study's limits, with proof, map and site list",
    "certify": "proves a plan again, from its study, layout and certificate alone",
    "audit": "what sites that you chose achieve, and how far they are from the fewest",
    "replan": "the fewest sites on a changed layout, keeping the most of a plan's",
    "report": "one HTML page of a plan, for the review and for the line",
    "start": "a layout and a study, ready to run, from a bare table of marks",
    "bring": "the same from a DXF, GDSII, OASIS, Gerber or Excellon file",
    "characterise": "model, noise, variation and read rates from densely measured pilot panels",
    "fit": "corrections of measured panels, whether each meets its limits, and whether the plan still holds",
    "verify": "an independent check of a plan's claims, on simulated and on pilot panels",
    "lot": "how many panels of a lot to measure, and at how many sites, for the fewest seconds",
    "completion": "the script that completes commands and options in your shell",
    "budget": "from pad and via to the position limit, and from a plan to the pad it supports",
}
"""Every command with its one line of help; `sampler/cli/NAME.py` holds it as `command`."""

BAD_INPUT = 1
CANNOT_BE_MET = 3


class Commands(click.Group):
    """Loads a command's module only when it is asked for, so that help and start-up stay fast."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in COMMANDS:
            return None
        command: click.Command = importlib.import_module(f"sampler.cli.{name}").command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.command(cls=Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, package_name="sampler")
def group() -> None:
    """Chooses the fewest marks of a panel to measure so that its corrections are certain enough, and proves it.

    Exit status: 0 every limit met; 1 bad input; 2 wrong usage; 3 no set of candidate sites can meet the limits.
    """


def main() -> None:
    """Entry point; faults of input go to stderr as one message and exit 1."""
    try:
        group()
    except CertificateError as error:
        click.echo(f"Refused: {error}", err=True)
        sys.exit(BAD_INPUT)
    except SamplerError as error:
        from sampler.report.summary import faults_text

        click.echo(faults_text(error), err=True)
        sys.exit(BAD_INPUT)
