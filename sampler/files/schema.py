"""What a TOML file may hold, as tables of keys: a new key is one row.

A kind takes `(value, place, faults)` and gives the value to use; a value that is not allowed is added to the faults and
becomes None, as an optional key that is absent.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from sampler.files.faults import Faults, did_you_mean, nearest, shown

Kind = Callable[[Any, str, Faults], Any]
Values = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Key:
    """One key of a table. `needs` says in words what it takes when it is required and missing."""

    name: str
    kind: Kind
    needs: str = ""
    default: Any = None


def read_keys(table: dict[str, Any], keys: Sequence[Key], place: str, faults: Faults, others: Kind | None = None) -> Values:
    """The values of a table by key, None where absent or faulty; `others` takes every key that is not listed."""
    at = f"{place} " if place else ""
    known = {key.name: key for key in keys}
    read: Values = {key.name: key.default for key in keys}
    misspelt = set()
    for name, value in table.items():
        if name in known:
            read[name] = known[name].kind(value, f"{at}{name}", faults)
        elif others is not None and isinstance(value, dict):
            read[name] = others(value, f"{place[:-1]}.{name}]", faults)
        else:
            near = nearest(name, [key for key in known if key not in table])
            misspelt.add(near)
            faults.add(f"{at}{name} is not a known key; "
                       + (f'did you mean "{near}"?' if near else f"the keys are {', '.join(known)}"))
    for key in keys:
        if key.needs and key.name not in table and key.name not in misspelt:
            faults.add(f"{at}{key.name} is missing; give {key.needs}")
    return read


def _is_number(value: Any) -> bool:
    try:
        return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
    except OverflowError:
        return False


@dataclass(frozen=True, slots=True)
class Bounds:
    """Which numbers are allowed."""

    above: float | None = None
    at_least: float | None = None
    at_most: float | None = None

    def hold(self, value: float) -> bool:
        return ((self.above is None or value > self.above) and (self.at_least is None or value >= self.at_least)
                and (self.at_most is None or value <= self.at_most))

    def __str__(self) -> str:
        parts = [f"{word} {bound:g}" for word, bound in
                 (("above", self.above), ("of at least", self.at_least), ("of at most", self.at_most))
                 if bound is not None]
        return "".join(f" {part}" for part in [" and ".join(parts)] if part)


ANY = Bounds()


def number(bounds: Bounds = ANY) -> Kind:
    def read(value: Any, place: str, faults: Faults) -> float | None:
        if _is_number(value) and bounds.hold(value):
            return float(value)
        faults.add(f"{place} is {shown(value)}; give a finite number{bounds}")
        return None
    return read


def whole(bounds: Bounds = ANY) -> Kind:
    def read(value: Any, place: str, faults: Faults) -> int | None:
        if isinstance(value, int) and not isinstance(value, bool) and bounds.hold(value):
            return value
        faults.add(f"{place} is {shown(value)}; give a whole number{bounds}")
        return None
    return read


def numbers(count: int, what: str, bounds: Bounds = ANY) -> Kind:
    """`count` numbers as a tuple; `what` names them, such as "[x, y]"."""
    def read(value: Any, place: str, faults: Faults) -> tuple[float, ...] | None:
        if (isinstance(value, list) and len(value) == count
                and all(_is_number(item) and bounds.hold(item) for item in value)):
            return tuple(float(item) for item in value)
        faults.add(f"{place} is {shown(value)}; give {what}, {count} finite numbers{bounds}")
        return None
    return read


def points(least: int) -> Kind:
    """A list of [x, y] as an array (k, 2), at least `least` of them."""
    def read(value: Any, place: str, faults: Faults) -> np.ndarray | None:
        if not isinstance(value, list) or len(value) < least:
            faults.add(f"{place} is {shown(value)}; give a list of at least {least} points [x, y]")
            return None
        wrong = [i for i, item in enumerate(value) if not (isinstance(item, list) and len(item) == 2
                                                            and all(_is_number(number) for number in item))]
        for i in wrong[:3]:
            faults.add(f"{place} point {i + 1} is {shown(value[i])}; give [x, y], two finite numbers")
        return None if wrong else np.array(value, float)
    return read


def flag(value: Any, place: str, faults: Faults) -> bool | None:
    if isinstance(value, bool):
        return value
    faults.add(f"{place} is {shown(value)}; give true or false")
    return None


def text(value: Any, place: str, faults: Faults) -> str | None:
    if isinstance(value, str) and value.strip():
        return value
    faults.add(f"{place} is {shown(value)}; give a text")
    return None


def texts(value: Any, place: str, faults: Faults) -> tuple[str, ...] | None:
    """A list of texts as a tuple without repeats."""
    if isinstance(value, list) and all(isinstance(item, str) and item for item in value):
        return tuple(dict.fromkeys(value))
    faults.add(f"{place} is {shown(value)}; give a list of texts")
    return None


def text_or_texts(value: Any, place: str, faults: Faults) -> tuple[str, ...] | None:
    return texts([value] if isinstance(value, str) else value, place, faults)


def one_of(*allowed: str) -> Kind:
    def read(value: Any, place: str, faults: Faults) -> str | None:
        if isinstance(value, str) and value in allowed:
            return value
        choices = " or ".join(f'"{choice}"' for choice in allowed)
        ending = did_you_mean(value, allowed, f"give {choices}") if isinstance(value, str) else f"give {choices}"
        faults.add(f"{place} is {shown(value)}; {ending}")
        return None
    return read


def one_number_of(*allowed: int) -> Kind:
    def read(value: Any, place: str, faults: Faults) -> int | None:
        if isinstance(value, int) and not isinstance(value, bool) and value in allowed:
            return value
        faults.add(f"{place} is {shown(value)}; give {', '.join(map(str, allowed[:-1]))} or {allowed[-1]}")
        return None
    return read


def named_numbers(what: str, bounds: Bounds = ANY) -> Kind:
    """A table of numbers by names that the user chooses, as pairs."""
    def read(value: Any, place: str, faults: Faults) -> tuple[tuple[str, float], ...] | None:
        if not isinstance(value, dict):
            faults.add(f"{place} is {shown(value)}; give a table of {what}")
            return None
        one = number(bounds)
        read_in = {name: one(item, f'{place} "{name}"', faults) for name, item in value.items()}
        return tuple((name, item) for name, item in read_in.items() if item is not None)
    return read


def format_number(value: Any, place: str, faults: Faults) -> int | None:
    if value == 1 and isinstance(value, int) and not isinstance(value, bool):
        return value
    faults.add(f"{place} is {shown(value)}, which this version does not know; give format = 1")
    return None


def table(*keys: Key, others: Kind | None = None) -> Kind:
    """A table `[name]` as a dictionary."""
    def read(value: Any, place: str, faults: Faults) -> Values | None:
        bracketed = place if place.startswith("[") else f"[{place}]"
        if isinstance(value, dict):
            return read_keys(value, keys, bracketed, faults, others)
        faults.add(f"{place} is {shown(value)}; give a table {bracketed}")
        return None
    return read


def tables(*keys: Key, least: int = 0) -> Kind:
    """A list of tables `[[name]]` as a list of dictionaries, each with its `place` and the keys `present`, for messages."""
    def read(value: Any, place: str, faults: Faults) -> list[Values] | None:
        place = place.removeprefix("[").replace("] ", ".")
        if not isinstance(value, list) or len(value) < least or not all(isinstance(item, dict) for item in value):
            faults.add(f"{place} is {shown(value)}; give tables [[{place}]]")
            return None
        read_in = []
        for i, item in enumerate(value, 1):
            at = f"[[{place}]] no. {i}" if len(value) > 1 else f"[[{place}]]"
            read_in.append({**read_keys(item, keys, at, faults), "place": at, "present": set(item)})
        return read_in
    return read


def exactly_one(values: Values, names: Sequence[str], faults: Faults) -> str | None:
    """Which one of several keys a table of `tables` has; None or several are a fault, a faulty one gives None."""
    has = [name for name in names if name in values["present"]]
    if len(has) == 1:
        return has[0] if values[has[0]] is not None else None
    faults.add(f"{values['place']} has {' and '.join(has) if has else 'none of ' + ', '.join(names)}; give exactly one of "
               + ", ".join(names))
    return None
