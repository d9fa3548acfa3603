"""Whole commands as a user runs them: seconds and peak memory of a process of its own, against their targets.

    python tests/bench/bench_command.py [million]
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parents[2]
LAYOUT = """format = 1
name = "invented lattice of marks"
[panel]
width_mm = 510.0
height_mm = 515.0
edge_exclusion_mm = 5.0
[[marks]]
file = "marks.csv"
"""
STUDY = """format = 1
title = "invented, {name}"
layout = "layout.toml"
[model]
panel = ["{family}"]
[noise]
mark_um = [0.25, 0.25]
local_um = [0.40, 0.40]
[[limit]]
terms = "all"
max = {limit}
[search]
seconds = {seconds}
"""


def timed(*command):
    """Wall seconds, peak memory of the process in GB, and its output."""
    began = time.monotonic()
    process = subprocess.Popen([sys.executable, *map(str, command)], stdout=subprocess.PIPE, cwd=ROOT, text=True,
                               env={**os.environ, "PYTHONIOENCODING": "utf-8"})
    out, _ = process.communicate()
    return time.monotonic() - began, resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1e6, out


def row(what, value, seconds, target_s, memory=None, target_gb=None):
    said = "" if memory is None else f"{memory:6.2f} GB of {target_gb} GB"
    print(f"{what:44} {value:34} {seconds:7.2f} s  target {target_s:5.1f} s  ratio {seconds / target_s:5.2f}  {said}", flush=True)


def lattice(side, family, limit, seconds, target_s, target_gb):
    with tempfile.TemporaryDirectory() as folder:
        folder = Path(folder)
        x, y = np.meshgrid(np.linspace(-245, 245, side), np.linspace(-247, 247, side))
        lines = (f"M{i},{a:.4f},{b:.4f}" for i, (a, b) in enumerate(zip(x.ravel(), y.ravel(), strict=True)))
        (folder / "marks.csv").write_text("id,x_mm,y_mm\n" + "\n".join(lines) + "\n")
        (folder / "layout.toml").write_text(LAYOUT)
        (folder / "study.toml").write_text(STUDY.format(name=f"{side}² {family}", family=family, limit=limit, seconds=seconds))
        spent, memory, _ = timed("-m", "sampler", "plan", folder / "study.toml", "--out", folder / "out")
        plan = json.loads((folder / "out" / "plan.json").read_text(encoding="utf-8"))
        value = f"{plan['n_sites']} sites, bound {plan['lower_bound']:.2f}, proven {plan['fewest_proven']}"
        row(f"plan, {side * side:,} marks, {family}, CSV to map", value, spent, target_s, memory, target_gb)


def main():
    for _ in range(2):  # the second time from a warm disk
        helped = timed("-m", "sampler", "--help")[0]
        imported = timed("-c", "import sampler")[0]
    row("sampler --help", "", helped, 0.3)
    row("import sampler", "", imported, 0.3)
    with tempfile.TemporaryDirectory() as folder:
        spent, memory, out = timed("-m", "sampler", "plan", "examples/first-plan/study.toml", "--out", f"{folder}/out")
    row("first example, picture included", out.splitlines()[0][:34], spent, 4.0, memory, 1.0)
    lattice(316, "order2", 2.0, 10, 15.0, 1.0)
    if "million" in sys.argv[1:]:
        lattice(1000, "order2", 2.0, 20, 30.0, 4.0)
        lattice(1000, "order3", 3.5, 48, 60.0, 4.0)


if __name__ == "__main__":
    main()
