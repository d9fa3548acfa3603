"""The worked case of examples/new-product: every command of its README, in order, as it stands there."""

from __future__ import annotations

import re
import shlex
import shutil
from pathlib import Path

from click.testing import CliRunner

from sampler.cli.main import COMMANDS, group

ROOT = Path(__file__).parents[1]
README = (ROOT / "examples" / "new-product" / "README.md").read_text(encoding="utf-8")
STEPS = re.findall(r"^   sampler (.*)$", README, re.MULTILINE)


def test_every_step_runs(tmp_path, monkeypatch):
    shutil.copytree(ROOT / "examples" / "new-product", tmp_path / "examples" / "new-product")
    monkeypatch.chdir(tmp_path)
    for step in STEPS:
        done = CliRunner().invoke(group, shlex.split(step))
        assert done.exit_code == 0, f"{step}\n{done.output}\n{done.exception}"
    written = tmp_path / "out" / "new-product"
    assert (written / "plan" / "report.html").stat().st_size > 50_000
    assert (written / "process" / "process.toml").read_text(encoding="utf-8").splitlines()[3:] == \
        (ROOT / "examples" / "new-product" / "process.toml").read_text(encoding="utf-8").splitlines()[3:]


def test_the_case_uses_the_commands_of_a_new_product():
    used = {step.split()[0] for step in STEPS}
    assert used >= set(COMMANDS) - {"audit", "bring", "completion", "lot"}
