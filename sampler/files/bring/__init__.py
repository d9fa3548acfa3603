"""Marks from drawings and machine data: what is drawn, a choice among it, and the layout and study to begin with."""

from sampler.files.bring.drawn import Drawn, Group, Selection
from sampler.files.bring.read import bring, drawn

__all__ = ["Drawn", "Group", "Selection", "bring", "drawn"]
