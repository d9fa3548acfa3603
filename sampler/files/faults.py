"""Collecting every fault of a study with all its files before anything is raised."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

from sampler.errors import InputError

MOST_ROWS = 20
"""Faulty rows of one table listed one by one; the rest are counted."""
MOST_SHOWN = 60
MOST_COMPARED = 20_000
"""Names compared letter by letter for the nearest one; more are first thinned to those that begin or end alike."""


@dataclass(frozen=True, slots=True)
class Faults:
    """Faults and warnings of one file; `of` gives the same collection for another file of the same study."""

    where: str
    messages: list[str] = field(default_factory=list)
    warnings: list[str] = field(default_factory=list)

    def of(self, where: str) -> Faults:
        return Faults(where, self.messages, self.warnings)

    def add(self, sentence: str) -> None:
        self.messages.append(f"{self.where}: {sentence}")

    def warn(self, sentence: str) -> None:
        self.warnings.append(f"{self.where}: {sentence}")

    def rows(self, found: Sequence[tuple[int, str]]) -> None:
        """Faults of single rows, `(line, sentence)`: the first ones in order of line, the rest as a count."""
        for line, sentence in sorted(found)[:MOST_ROWS]:
            self.add(f"line {line}: {sentence}")
        if len(found) > MOST_ROWS:
            self.add(f"and {len(found) - MOST_ROWS:,} more faults in rows; mend these first")

    def close(self) -> None:
        """Raises InputError with every fault, if there is one."""
        if self.messages:
            raise InputError(dict.fromkeys(self.messages))


def nearest(name: str, names: Iterable[str]) -> str | None:
    """The most similar of the names, if any is similar."""
    names = list(names)
    if len(names) > MOST_COMPARED:
        names = [other for other in names if abs(len(other) - len(name)) <= 2
                 and (other[:3] == name[:3] or other[-3:] == name[-3:])][:MOST_COMPARED]
    same = [other for other in names if other.casefold() == name.casefold()]
    close = same or difflib.get_close_matches(name, names, 1)
    return close[0] if close else None


def did_you_mean(name: str, names: Sequence[str], otherwise: str) -> str:
    """The end of a sentence about an unknown name."""
    near = nearest(name, names)
    return f'did you mean "{near}"?' if near is not None else otherwise


def shown(value: Any) -> str:
    """A value as the reader of a message would recognise it, shortened."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        text = f'the text "{value}"' if value else "an empty text"
    elif isinstance(value, dict):
        text = "a table"
    elif isinstance(value, list):
        text = "[" + ", ".join(shown(item).removeprefix("the text ") for item in value[:8])
        text += ", …]" if len(value) > 8 else "]"
    elif isinstance(value, float) and math.isfinite(value):
        text = f"{value:.12g}"
    else:
        text = str(value)
    text = " ".join(text.split())
    return text if len(text) <= MOST_SHOWN else text[: MOST_SHOWN - 1] + "…"
