"""The real table of commands: each has help, documentation and the shared options."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

import sampler
from sampler.cli.main import COMMANDS, group

ROOT = Path(__file__).parents[2]
WITHOUT_OUT = {"certify", "completion"}
"""Commands that only read and print."""


def run(*arguments):
    return CliRunner().invoke(group, list(arguments))


def test_help_lists_every_command():
    shown = run("--help")
    assert shown.exit_code == 0
    for name in COMMANDS:
        assert f"\n  {name} " in shown.output


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_has_help_options_and_a_readme_section(name):
    shown = run(name, "--help")
    assert shown.exit_code == 0
    assert len(shown.output.split("Options:")[0]) > 80, "one line on what it does"
    assert "--json" in shown.output
    assert ("--out" in shown.output) == (name not in WITHOUT_OUT)
    assert f"### `sampler {name}" in (ROOT / "README.md").read_text(encoding="utf-8")


def test_one_file_per_command():
    files = {path.stem for path in (ROOT / "sampler" / "cli").glob("*.py")}
    assert set(COMMANDS) <= files


@pytest.mark.parametrize("arguments", [["plann"], ["plan"], ["plan", "x.toml"], ["plan", "x.toml", "--ouut", "d"]])
def test_wrong_usage_is_exit_2(arguments):
    assert run(*arguments).exit_code == 2


def test_version():
    assert sampler.__version__ in run("--version").output


def test_heavy_packages_are_not_loaded_for_help():
    code = ("import sys; from sampler.cli.main import group\ntry:\n    group(['--help'])\nexcept SystemExit:\n    pass\n"
            "heavy = {'numpy', 'scipy', 'cvxpy', 'highspy', 'matplotlib', 'shapely', 'pyarrow', 'jinja2'}\n"
            "print(sorted(heavy & set(sys.modules)))")
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert shown.stdout.strip().endswith("[]")


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_completion_names_the_program(shell):
    shown = run("completion", shell)
    assert shown.exit_code == 0
    assert "_SAMPLER_COMPLETE" in shown.output
    assert "sampler" in run("completion", shell, "--json").output


def test_completion_completes_commands():
    from click.shell_completion import ShellComplete

    found = ShellComplete(group, {}, "sampler", "_SAMPLER_COMPLETE").get_completions([], "pl")
    assert [item.value for item in found] == ["plan"]
