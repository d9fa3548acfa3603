"""A small invented study with its layout and marks, and the faults of a changed one."""

from __future__ import annotations

import pytest

from sampler.errors import InputError
from sampler.files.study import read_study

STUDY = """format = 1
title = "A small study"
layout = "layouts/panel.toml"
coverage_factor = 3.0

[model]
panel = ["affine", "trapezoid"]
[model.exposure]
shared = ["rotation"]

[noise]
mark_um = [0.25, 0.3]
local_um = [0.4, 0.5]

[[limit]]
terms = ["scale_x", "scale_y"]
max = 8.0
[[limit]]
region = "panel"
position_um = 2.0

[rules]
required = ["E-c1r1-1"]
forbidden = ["E-c2r2-4"]
max_sites = 60

[search]
seconds = 5
seed = 3
"""

LAYOUT = """format = 1
name = "invented small panel"

[panel]
width_mm = 510.0
height_mm = 515.0
edge_exclusion_mm = 8.0
origin = "centre"

[[grid]]
name = "exposure"
columns = 4
rows = 4
cell_mm = [118.0, 119.0]
pitch_mm = [122.0, 123.0]

[[marks]]
grid = "exposure"
prefix = "E"
at_mm = [[-50.0, -50.0], [50.0, -50.0], [50.0, 50.0], [-50.0, 50.0]]
[[marks]]
file = "marks.csv"

[[keep_out]]
name = "clamp left"
rectangle_mm = [-255.0, -40.0, -230.0, 40.0]
[[keep_out]]
name = "pin"
circle_mm = [0.0, 0.0, 9.0]
"""

MARKS = """id,x_mm,y_mm,side,sigma_x_um
F1,-240.0,10.0,front,
F2,0.0,3.0,front,0.5
F3,10.0,10.0,back,
F4,200.5,-11.25,,
"""


def write_study(folder, study=STUDY, layout=LAYOUT, marks=MARKS):
    """The three files in a folder; text or bytes; None leaves a file out. Gives the path of the study."""
    (folder / "layouts").mkdir(exist_ok=True)
    for name, content in (("study.toml", study), ("layouts/panel.toml", layout), ("layouts/marks.csv", marks)):
        if content is not None:
            (folder / name).write_bytes(content if isinstance(content, bytes) else content.encode())
    return folder / "study.toml"


def faults_of(path, read=read_study):
    with pytest.raises(InputError) as caught:
        read(path)
    return list(caught.value.faults)
