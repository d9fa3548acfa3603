"""README's study file names every key that a study may have, and only such keys."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

from sampler.files.recipe import MACHINE, MEASURE, RULES, SEARCH
from sampler.files.study import KEYS
from sampler.route.machine import Machine

README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
SHOWN = tomllib.loads(re.search(r"## Study file.*?```toml\n(.*?)```", README, re.DOTALL).group(1))


def names(kind):
    """The keys that a table of the schema knows."""
    return {key.name for key in kind.__closure__[kind.__code__.co_freevars.index("keys")].cell_contents}


def test_every_key_is_documented_and_every_documented_key_is_known():
    top = {key.name for key in KEYS} - {"name", "title"}
    assert set(SHOWN) == top
    for name, kind in (("measure", MEASURE), ("machine", MACHINE), ("rules", RULES), ("search", SEARCH)):
        assert set(SHOWN[name]) == names(kind), name
    kinds = {key.name: key.kind for key in KEYS}
    assert set(SHOWN["noise"]) == names(kinds["noise"])
    for name in ("prior", "limit"):
        shown = {key for item in SHOWN[name] for key in item}
        assert shown | {"polygon_mm"} == names(kinds[name]) | {"polygon_mm"}


def test_the_machine_shown_is_the_default():
    shown = {name: tuple(value) if isinstance(value, list) else value for name, value in SHOWN["machine"].items()}
    assert shown.pop("start_mm") == shown.pop("end_mm") == (0.0, 0.0)
    assert Machine(**shown) == Machine()
