"""How results are said, the same in figures, text and pages."""

from __future__ import annotations

import math
import unicodedata


def significant(value: float, digits: int = 3) -> str:
    """A number as a person writes it: `digits` significant digits, an exponent only where zeros would be hard to count.

    >>> [significant(v) for v in (0.58172, 12.34, 999.6, 1e-9, math.inf)]
    ['0.582', '12.3', '1000', '1.00e-09', 'not determined']
    """
    if not math.isfinite(value):
        return "not determined"
    if value == 0:
        return "0"
    rounded = float(f"{value:.{digits - 1}e}")
    decimals = digits - 1 - math.floor(math.log10(abs(rounded)))
    return f"{value:.{digits - 1}e}" if not -4 <= decimals <= digits + 4 else f"{rounded:.{max(0, decimals)}f}"


def against(predicted: float, maximum: float, digits: int = 3) -> tuple[str, str]:
    """A prediction and its limit as texts, with as many digits as it takes to show on which side of the limit it is.

    >>> against(0.93123, 1.0), against(1.0004, 1.0)
    (('0.931', '1'), ('1.0004', '1'))
    """
    text = significant(predicted, digits)
    for more in range(digits + 1, 8):
        if not math.isfinite(predicted) or predicted == maximum or (
                float(text) != maximum and (float(text) > maximum) == (predicted > maximum)):
            break
        text = significant(predicted, more)
    return text, f"{maximum:.6g}"


def share(ratio: float) -> str:
    """A ratio to a limit in whole per cent, never rounded across the limit.

    >>> share(0.931), share(0.9999), share(1.0), share(1.0001), share(math.inf)
    ('93 %', '99 %', '100 %', '101 %', '-')
    """
    if not math.isfinite(ratio):
        return "-"
    if ratio > 10:
        return f"{significant(ratio)}x"
    per_cent = 100 * ratio
    whole = round(per_cent)
    if ratio < 1:
        whole = min(whole, 99)
    elif ratio > 1:
        whole = max(whole, 101)
    return f"{whole} %"


def columns(text: str) -> int:
    """How many columns of a terminal a line takes; East Asian wide letters take two."""
    return sum(2 if unicodedata.east_asian_width(letter) in "WF" else 1 for letter in text)


def plain(text: str, most: int) -> str:
    """A name from a file as one printable line of at most `most` columns.

    >>> plain("a very long\\nname", 10)
    'a very...'
    """
    line = "".join(letter for letter in " ".join(text.split()) if letter.isprintable())
    if columns(line) <= most:
        return line
    while columns(line) > most - 3:
        line = line[:-1]
    return line.rstrip() + "..."
