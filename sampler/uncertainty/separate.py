"""Terms that the candidate sites cannot tell apart, in plain words, from the null space of their information."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr

from sampler.uncertainty.information import Knowledge

PART_TOLERANCE = 1e-5
"""A term whose part in a null direction is smaller than this (all terms scaled to equal effect) is not in it."""


def inseparable(information: NDArray[np.float64]) -> list[list[int]]:
    """Groups of columns whose effects the readings cannot tell apart; a group of one has no effect at all.

    Each group is one relation of the null space, reduced so that it has a term no other group has.
    """
    knowledge = Knowledge.of(information)
    dead = np.flatnonzero(np.diag(information) <= 0)
    null = knowledge.vectors[:, ~knowledge.known]
    null = null[:, np.abs(np.delete(null, dead, axis=0)).max(axis=0, initial=0.0) > PART_TOLERANCE]
    groups = [[int(column)] for column in dead]
    if null.shape[1]:
        null[dead] = 0.0
        _, _, order = qr(null.T, pivoting=True)
        relations = null @ np.linalg.inv(null[order[:null.shape[1]]])
        groups += [np.flatnonzero(np.abs(relation) > PART_TOLERANCE).tolist() for relation in relations.T]
    return sorted(groups)


def in_words(groups: list[list[int]], names: tuple[str, ...]) -> list[str]:
    """One sentence a group: which terms, and what to do."""
    sentences = []
    for group in groups:
        quoted = [f"`{names[column]}`" for column in group]
        if len(group) == 1:
            sentences.append(f"{quoted[0]} has no effect on any of these candidates: drop it, or add marks where it acts")
        else:
            alike = "act alike on these candidates" if len(group) == 2 else \
                "cannot be told apart on these candidates (each is a mixture of the others)"
            sentences.append(f"{', '.join(quoted[:-1])} and {quoted[-1]} {alike}: drop one")
    return sentences
