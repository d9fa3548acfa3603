"""What the commands share: options, the progress line, and a Ctrl-C that ends a search instead of the program."""

from __future__ import annotations

import signal
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

import click

study_argument = click.argument("study", type=click.Path())
out_option = click.option("--out", required=True, type=click.Path(), metavar="DIR",
                          help="Folder for the results; an existing result there is replaced whole.")
json_option = click.option("--json", "as_json", is_flag=True, help="Print the result as JSON instead of text.")

SECONDS_BETWEEN_LINES = 0.2


def site_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """How sites are written and drawn."""
    for option in (
            click.option("--route/--no-route", default=None, help="Draw the route on the map; by default when the study has a "
                                                                  "[machine]."),
            click.option("--frame", type=click.Choice(["panel", "machine"]), default="panel", show_default=True,
                         help="Frame of the coordinates in sites.csv.")):
        command = option(command)
    return command


def start_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """What an engineer says of a bare list of marks instead of having it guessed."""
    for option in (
            click.option("--panel", nargs=2, type=float, metavar="WIDTH HEIGHT", help="Size of the panel, mm."),
            click.option("--origin", default="", metavar="WHERE", help="Where the coordinates start: centre or lower-left."),
            click.option("--unit", default="", help="Unit of the coordinates: mm, um, inch, mil or m.")):
        command = option(command)
    return command


def show_start(begun: Any, out: str, as_json: bool) -> None:
    """Writes what `start` and `bring` begin with, and says what was guessed and what comes next."""
    from sampler.files.output import write_results
    from sampler.files.start import start_files, start_json

    write_results(out, dict(start_files(begun)), must_be_new=True)
    if as_json:
        click.echo(start_json(begun))
        return
    for finding in begun.findings:
        click.echo(finding)
    click.echo(f"Written: {out}/study.toml, layout.toml, marks.csv. Look through study.toml, then: sampler plan {out}/study.toml "
               f"--out {out}/plan")


@contextmanager
def interruptible() -> Iterator[Callable[[], bool]]:
    """Gives `stop()`, true after Ctrl-C; a second Ctrl-C ends the program as usual."""
    pressed = False

    def note(number: int, frame: FrameType | None) -> None:
        nonlocal pressed
        if pressed:
            raise KeyboardInterrupt
        pressed = True
        click.echo("\nending the search; the best so far is written (Ctrl-C again: end at once, write nothing)", err=True)

    before = signal.signal(signal.SIGINT, note)
    try:
        yield lambda: pressed
    finally:
        signal.signal(signal.SIGINT, before)


def progress_on_terminal() -> Callable[[float, float], None] | None:
    """A line on stderr with bound and best, rewritten in place; None when stderr is not a terminal."""
    if not sys.stderr.isatty():
        return None
    from sampler.report.summary import progress_line

    began, last = time.monotonic(), 0.0

    def show(bound: float, best: float) -> None:
        nonlocal last
        now = time.monotonic()
        if now - last >= SECONDS_BETWEEN_LINES:
            last = now
            click.echo("\r" + progress_line(bound, best, now - began) + "\x1b[K", err=True, nl=False)

    return show


def end_progress(show: Callable[..., Any] | None) -> None:
    """Clears the progress line."""
    if show is not None:
        click.echo("\r\x1b[K", err=True, nl=False)


@contextmanager
def saying() -> Iterator[Callable[[str], None]]:
    """Gives `tell(text)`, one line on stderr rewritten in place; nothing when stderr is not a terminal."""
    terminal = sys.stderr.isatty()

    def tell(text: str) -> None:
        if terminal:
            click.echo(f"\r{text} ...\x1b[K", err=True, nl=False)

    try:
        yield tell
    finally:
        end_progress(tell if terminal else None)
