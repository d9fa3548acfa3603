"""Every example gives the answer that its README shows, and README's own figures are those of the first example."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from click.testing import CliRunner

from sampler.cli.main import group

ROOT = Path(__file__).parents[1]
EXAMPLES = sorted(path.parent for path in ROOT.glob("examples/*/study.toml"))
LINE = re.compile(r"^(\d+ (?:sites?|stops?), .*|Between .*|Cannot be met.*)$", re.MULTILINE)


def answer(text):
    """The first line of the answer, less the figures that a time limit may move."""
    return re.sub(r" \(.*", "", LINE.search(text).group(1))


@pytest.mark.parametrize("folder", EXAMPLES, ids=lambda folder: folder.name)
def test_example_gives_the_answer_of_its_readme(folder, tmp_path, monkeypatch):
    monkeypatch.chdir(ROOT)
    shown = CliRunner().invoke(group, ["plan", f"examples/{folder.name}/study.toml", "--out", str(tmp_path / "out")])
    readme = (folder / "README.md").read_text(encoding="utf-8")
    assert shown.exit_code == (3 if "Cannot be met" in readme else 0), shown.output
    assert answer(shown.output) == answer(readme)
    if shown.exit_code == 0:
        certified = CliRunner().invoke(group, ["certify", str(tmp_path / "out")])
        assert certified.exit_code == 0


def test_there_are_enough():
    assert len(EXAMPLES) >= 5


def test_readme_shows_the_first_example():
    first = (ROOT / "examples" / "first-plan" / "README.md").read_text(encoding="utf-8")
    assert answer(first) == answer((ROOT / "README.md").read_text(encoding="utf-8"))
