"""`sampler completion`."""

from __future__ import annotations

import click
from click.shell_completion import get_completion_class

from sampler.cli.shared import json_option

SHELLS = ("bash", "zsh", "fish")


@click.command("completion")
@click.argument("shell", type=click.Choice(SHELLS))
@json_option
def command(shell: str, as_json: bool) -> None:
    """Prints the script that completes sampler's commands and options in SHELL.

    For bash: sampler completion bash >> ~/.bashrc
    """
    from sampler.cli.main import group
    from sampler.files.output import json_text

    kind = get_completion_class(shell)
    assert kind is not None
    script = kind(group, {}, "sampler", "_SAMPLER_COMPLETE").source()
    click.echo(json_text({"shell": shell, "script": script}) if as_json else script)
