"""Marks from Gerber X2 layers and Excellon drill files."""

from __future__ import annotations

import re
import warnings
from collections import defaultdict
from pathlib import Path
from typing import Any

import numpy as np

from sampler.files.bring.drawn import MOST_DRAWN, Drawn, Part, missing_extra, short_reason, too_many
from sampler.files.faults import Faults

# Statements that move or repeat what follows in ways that are not read. Default values do nothing and are allowed.
_REFUSED = ((rb"%AB", "aperture blocks (AB)"), (rb"%MI[^*]*1", "mirroring of the image (MI)"),
            (rb"%SF(?!A1(\.0*)?B1(\.0*)?\*)", "scaling of the image (SF)"), (rb"%IR(?!0\*)", "rotation of the image (IR)"),
            (rb"%OF[^*]*[1-9]", "an offset of the image (OF)"), (rb"%ASAYBX", "exchanged axes (AS)"),
            (rb"%IF", "include files (IF)"), (rb"(?m)^(G0?1)?G91\*", "incremental coordinates (G91)"))
_REPEAT = re.compile(r"%SRX(\d+)Y(\d+)I([\d.+-]+)J([\d.+-]+)\*%(.*?)(?=%SR)", re.S)
_REPEAT_MARK = ".SamplerRepeat"
_REPEAT_LEFT = "%SRX"
_STATED_FORMAT = re.compile(r"(?m)^(M71|METRIC|M72|INCH)(,LZ|,TZ)?,0+\.0*|^;FILE_FORMAT=\d:\d|^;FORMAT=\{\d")
_STATED_ZEROS = re.compile(r"(?m)^(M71|METRIC|M72|INCH),(LZ|TZ)")
_COORDINATE = re.compile(r"(?m)^(?:G0[0-3]|R\d+)?(?:[XY][+-]?\d+)+\s*$")


def read_gerber(path: Path, data: bytes, faults: Faults) -> Drawn | None:
    """Flashes by aperture with its function as attribute, step and repeat carried out; clear ones are a kind of their own."""
    try:
        from gerbonara import GerberFile
        from gerbonara.graphic_objects import Flash
        from gerbonara.utils import Inch
    except ImportError as error:
        raise missing_extra("Gerber", "gerber", faults) from error
    text = data.decode("utf-8", errors="replace")
    if not re.search(r"M0[02]\*\s*$", text):
        faults.add("the Gerber file does not end with M02, so that a part may be missing; export it again")
    for pattern, what in _REFUSED:
        if re.search(pattern, data):
            faults.add(f"the Gerber file uses {what}, which is not read; export it without")
    if faults.messages:
        return None
    text, repeats = _without_repeats(text)
    file = _parsed(GerberFile.from_string, text, "Gerber", faults)
    if file is None:
        return None
    if _REPEAT_LEFT in text:
        faults.add("the Gerber file has a step and repeat (SR) that does not end; export it again")
        return None
    factor = 25.4 if file.unit is Inch else 1.0
    gathered: dict[tuple[str, str, float, str], list[np.ndarray]] = defaultdict(list)
    total = 0
    for thing in file.objects:
        if not isinstance(thing, Flash):
            continue
        number = thing.attrs.get(_REPEAT_MARK)
        at = np.array([[thing.x, thing.y]]) + (repeats[int(number[0])] if number else 0.0)
        total += len(at)
        if total > MOST_DRAWN:
            faults.add(too_many())
            return None
        name, size = _aperture(thing.aperture, factor)
        function = dict(thing.aperture.attrs or ()).get(".AperFunction", ())
        kind = "flash" if thing.polarity_dark else "clear flash"
        gathered[kind, name, size, ",".join(function)].append(at)
    return Drawn.of([Part(kind, np.concatenate(at) * factor, "", name, size, function)
                     for (kind, name, size, function), at in gathered.items()], "mm")


def _without_repeats(text: str) -> tuple[str, list[np.ndarray]]:
    """Step and repeat taken out: what it repeats carries the number of its offsets (k, 2) as an attribute instead."""
    repeats: list[np.ndarray] = []

    def marked(match: re.Match[str]) -> str:
        columns, rows = int(match[1]), int(match[2])
        x, y = np.meshgrid(np.arange(columns) * float(match[3]), np.arange(rows) * float(match[4]))
        repeats.append(np.stack([x.ravel(), y.ravel()], axis=1))
        mark = f"%TO{_REPEAT_MARK},{len(repeats) - 1}*%"
        # An attribute that is deleted within must not take the mark along.
        body = re.sub(r"%TD\*%", lambda deleted: deleted[0] + mark, match[5])
        return mark + body + f"%TD{_REPEAT_MARK}*%"

    return re.sub(r"%SR\*%", "", _REPEAT.sub(marked, text)), repeats


def _aperture(aperture: Any, factor: float) -> tuple[str, float]:
    """An aperture's template with its measures, and its larger measure, in mm."""
    kind = type(aperture).__name__.removesuffix("Aperture").removesuffix("Instance").casefold()
    measures = [round(getattr(aperture, name) * factor, 6) for name in ("diameter", "w", "h")
                if getattr(aperture, name, None) is not None]
    if not measures:
        macro = getattr(getattr(aperture, "macro", None), "name", None)
        return f"macro {macro}" if macro else kind, float("nan")
    return f"{kind} {' x '.join(f'{measure:g}' for measure in measures)}", float(max(measures))


def read_excellon(path: Path, data: bytes, faults: Faults) -> Drawn | None:
    """Drilled holes by tool size; what is routed is left out.

    Refuses coordinates without decimal points when the file does not state their format: a guess would be a factor of ten.
    """
    try:
        from gerbonara import ExcellonFile
        from gerbonara.graphic_objects import Flash
        from gerbonara.utils import MM
    except ImportError as error:
        raise missing_extra("Excellon", "gerber", faults) from error
    text = data.decode("utf-8", errors="replace")
    if not re.search(r"(?m)^\s*(M30|M00)\s*$", text):
        faults.add("the drill file does not end with M30, so that a part may be missing; export it again")
    if _COORDINATE.search(text) and not (_STATED_FORMAT.search(text) and _STATED_ZEROS.search(text)):
        faults.add("the drill file has coordinates without decimal points and does not state their digits and which zeros are "
                   'left out (such as "METRIC,LZ,000.000"); export it with decimal points')
    if faults.messages:
        return None
    file = _parsed(ExcellonFile.from_string, text, "Excellon", faults)
    if file is None:
        return None
    gathered: dict[tuple[str, float], list[tuple[float, float]]] = defaultdict(list)
    for thing in file.objects:
        if isinstance(thing, Flash):
            factor = 1.0 if thing.unit is MM else 25.4
            gathered["drill", round(float(thing.aperture.diameter) * factor, 6)].append((thing.x * factor, thing.y * factor))
    if sum(map(len, gathered.values())) > MOST_DRAWN:
        faults.add(too_many())
        return None
    return Drawn.of([Part(kind, np.array(at), name=f"drill {size:g}", size=size) for (kind, size), at in gathered.items()], "mm")


def _parsed(parse: Any, text: str, format: str, faults: Faults) -> Any:
    """What the package makes of the text; None with a fault when it cannot read a statement, or would skip one."""
    with warnings.catch_warnings(record=True) as noted:
        warnings.simplefilter("always")
        try:
            file = parse(text)
        except Exception as error:  # what the package raises on broken files is not of one kind
            faults.add(f"the {format} file is broken ({short_reason(error).replace('<unknown>:', 'line ')}); export it "
                       "again")
            return None
    skipped = [str(note.message) for note in noted if re.search("Unknown statement|Re-definition", str(note.message))]
    if skipped:
        faults.add(f"the {format} file holds {len(skipped)} statements that are not read or said twice, first "
                   f"{skipped[0].removeprefix('<unknown>:').split(': ')[0]}; export it again")
        return None
    return file
