"""README's Python runs as it stands."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from click.testing import CliRunner

from sampler.cli.main import group

ROOT = Path(__file__).parents[1]
BLOCKS = re.findall(r"^```python\n(.*?)^```", (ROOT / "README.md").read_text(encoding="utf-8"), re.MULTILINE | re.DOTALL)


def test_there_are_blocks():
    assert len(BLOCKS) == 2


@pytest.mark.parametrize("number", range(len(BLOCKS)))
def test_block_runs_and_says_what_readme_says(number, monkeypatch, capsys, tmp_path):
    monkeypatch.chdir(ROOT)
    out = tmp_path / "near-saturated"
    assert CliRunner().invoke(group, ["plan", "examples/near-saturated/study.toml", "--out", str(out)]).exit_code == 0
    exec(compile(BLOCKS[number].replace("out/near-saturated", out.as_posix()), f"README block {number}", "exec"), {})
    printed = capsys.readouterr().out
    if "fewest proven" in BLOCKS[number]:
        assert re.search(r"# (\d+ sites, fewest proven)", BLOCKS[number]).group(1) in printed
    else:
        claimed = float(re.search(r"than this: ([\d.]+)", BLOCKS[number]).group(1))
        assert float(printed) == pytest.approx(claimed, abs=0.006)
