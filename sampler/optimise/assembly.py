"""Finds sets of patterns, one for each cell, that meet the limits: cells change patterns while a smooth worst ratio falls."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from sampler.optimise.arrow import RIDGE, Arrow
from sampler.optimise.blocks import Array
from sampler.optimise.patterns import Patterns
from sampler.optimise.pool import Indices

MEETS = 1.0 + 1e-9
EXPONENT = 32.0
OPTIONS = 150
"""Patterns of a cell that take part, by what they cost and are worth to the others."""
NEAR = 0.8
"""Limits of other cells below this share of the worst are not looked at while one cell is changed."""
SMALL_CHANGE = 1e-6
MOST_SWEEPS = 60


class Assembly:
    """One pattern of each cell: `at[k]` among the cell's options."""

    def __init__(self, shape: Arrow, patterns: list[Patterns], worth: list[Array], members: list[Array], lower: Array,
                 upper: Array) -> None:
        """`worth` (P,) of each cell's patterns: cost and value at the bound's duals; `members` (n,) of each rule."""
        self.shape = shape
        self.base = shape.prior + RIDGE * np.eye(shape.p)
        self.options, self.cost, self.schur, self.l, self.q, self.counts = [], [], [], [], [], []
        self.lower, self.upper = np.asarray(lower, float), np.asarray(upper, float)
        for each, value in zip(patterns, worth, strict=True):
            index = np.argsort(value, kind="stable")[:OPTIONS]
            for cost in np.unique(each.cost)[:3]:  # some of each of the least costs
                of_cost = np.flatnonzero(each.cost == cost)
                index = np.append(index, of_cost[np.argsort(value[of_cost], kind="stable")[:OPTIONS // 3]])
            index = np.unique(np.append(index, np.argmax(each.cost)))
            form = each.form.take(index)
            l_all, q = form.l_and_q(each.cell.columns)
            self.options.append(index)
            self.cost.append(each.cost[index])
            self.schur.append(form.schur)
            self.l.append(l_all)
            self.q.append(q)
            self.counts.append(np.array([each.inside[index] @ rule[each.cell.sites] for rule in members]
                                        ).reshape(len(members), len(index)).T)
        self.at = np.zeros(len(patterns), int)
        self.alone = shape.columns.T

    def total(self) -> float:
        return float(sum(cost[at] for cost, at in zip(self.cost, self.at, strict=True)))

    def counted(self) -> Array:
        return np.asarray(sum(counts[at] for counts, at in zip(self.counts, self.at, strict=True)))

    def sum(self) -> Array:
        return self.base + sum(schur[at] for schur, at in zip(self.schur, self.at, strict=True))

    def ratios(self) -> tuple[list[Array], Array]:
        """var/τ² of the limits of each cell, and of those on the panel's terms alone."""
        inverse = np.linalg.inv(self.sum())
        found = [l_all[at] + ((q[at] @ inverse) * q[at]).sum(axis=1)
                 for l_all, q, at in zip(self.l, self.q, self.at, strict=True)]
        return found, ((self.alone @ inverse) * self.alone).sum(axis=1)

    def worst(self) -> float:
        cells, alone = self.ratios()
        return max(float(part.max(initial=0.0)) for part in (*cells, alone))

    def scores(self, number: int, ratios: tuple[list[Array], Array]) -> Array:
        """The smooth worst ratio, as a power sum, for each option of one cell, (options,)."""
        cells, alone = ratios
        worst = max(float(part.max(initial=0.0)) for part in (*cells, alone))
        others = self.sum() - self.schur[number][self.at[number]]
        inverse = np.linalg.inv(others + self.schur[number])
        own = self.l[number] + ((self.q[number] @ inverse) * self.q[number]).sum(axis=2)
        score = ((own / worst) ** EXPONENT).sum(axis=1)
        l_near, q_near = [np.zeros(len(alone))[alone > NEAR * worst]], [self.alone[alone > NEAR * worst]]
        for other, part in enumerate(cells):
            if other != number and part.max(initial=0.0) > NEAR * worst:
                near = part > NEAR * worst
                l_near.append(self.l[other][self.at[other]][near])
                q_near.append(self.q[other][self.at[other]][near])
        q, l_all = np.concatenate(q_near), np.concatenate(l_near)
        rest = l_all + ((q @ inverse) * q).sum(axis=2)
        return np.asarray(score + ((rest / worst) ** EXPONENT).sum(axis=1))

    def allowed(self, number: int, budget: float) -> Array:
        """Options of a cell with which cost and rules are kept, or come nearer to being kept, (options,)."""
        at = self.at[number]
        fits = self.total() - self.cost[number][at] + self.cost[number] <= budget + 1e-9 * abs(budget)
        if len(self.lower):
            counts = self.counted() - self.counts[number][at] + self.counts[number]
            missed = np.maximum(self.lower - counts, 0.0).sum(axis=1) + np.maximum(counts - self.upper, 0.0).sum(axis=1)
            fits &= missed <= missed[at]
            if missed[at] > 0 and (missed[fits] < missed[at]).any():
                fits &= missed < missed[at]
        return fits

    def descend(self, budget: float, rng: np.random.Generator, over: Callable[[], bool]) -> bool:
        """Changes cells within the budget until every limit and rule is met (True) or nothing helps."""
        for _ in range(MOST_SWEEPS):
            moved = False
            for number in rng.permutation(len(self.at)):
                if over():
                    return False
                ratios = self.ratios()
                fits = self.allowed(number, budget)
                if not fits.any():
                    continue
                with np.errstate(over="ignore"):
                    score = np.where(fits, self.scores(number, ratios), np.inf)
                best = int(np.argmin(score))
                if not fits[self.at[number]] or score[best] < score[self.at[number]] * (1.0 - SMALL_CHANGE):
                    self.at[number] = best
                    moved = True
            if self.total() <= budget * (1.0 + 1e-9) and self._obeyed() and self.worst() <= MEETS:
                return True
            if not moved:
                return False
        return False

    def _obeyed(self) -> bool:
        counts = self.counted()
        return not len(self.lower) or bool(np.all(counts >= self.lower) and np.all(counts <= self.upper))

    def set_from(self, weights: list[Array], rng: np.random.Generator, spread: float) -> None:
        """Each cell's pattern of most weight; with `spread` sometimes another, at random."""
        for number, (weight, index) in enumerate(zip(weights, self.options, strict=True)):
            share = weight[index] + 1e-9 / (1.0 + self.cost[number])
            if rng.random() < spread:
                self.at[number] = int(rng.choice(len(index), p=share / share.sum()))
            else:
                self.at[number] = int(np.argmax(share))

    def enlarge(self, step: float) -> None:
        """The cell with the worst ratio takes its best option of up to `step` more cost."""
        ratios = self.ratios()
        number = int(np.argmax([part.max(initial=0.0) for part in ratios[0]]))
        more = self.cost[number] <= self.cost[number][self.at[number]] + step
        self.at[number] = int(np.argmin(np.where(more, self.scores(number, ratios), np.inf)))

    def chosen(self, patterns: list[Patterns]) -> Indices:
        """The sites of all cells, sorted."""
        return np.sort(np.concatenate([each.cell.sites[each.inside[index[at]] > 0.5] for each, index, at
                                       in zip(patterns, self.options, self.at, strict=True)]))


def assemble(assembly: Assembly, weights: list[Array], least: float, step: float, upper: float, *, rng: np.random.Generator,
             deadline: float, stop: Callable[[], bool] | None = None) -> Array | None:
    """The cheapest choice found of cost at least `least` and below `upper`: positions among the options, or None.

    Tries costs from `least` upward in growing steps until one is met, then downward again, with new starts while time is left.
    """

    def over() -> bool:
        return time.monotonic() >= deadline or (stop is not None and stop())

    best, budget, jump, tries = None, least, step, 0
    while not over() and budget < upper:
        assembly.set_from(weights, rng, 0.0 if not tries else 0.3)
        _fit(assembly, budget)
        if assembly.descend(budget, rng, over):
            upper = assembly.total()
            best = assembly.at.copy()
            budget, jump = least, step
        elif best is None and tries >= 1:
            budget, jump = budget + jump, 2.0 * jump
        elif tries % 4 == 3:
            budget = min(budget + step, upper - step) if budget + step < upper else least
        tries += 1
        if upper - step < least:
            break
    return best


def _fit(assembly: Assembly, budget: float) -> None:
    """Takes cells down in cost until the budget holds, those first whose options of less cost hurt least; or up to it."""
    while assembly.total() > budget * (1.0 + 1e-9):
        ratios = assembly.ratios()
        losses = []
        for number, at in enumerate(assembly.at):
            less = np.flatnonzero(assembly.cost[number] < assembly.cost[number][at])
            if len(less):
                with np.errstate(over="ignore"):
                    score = assembly.scores(number, ratios)[less]
                losses.append((float(score.min()), number, int(less[np.argmin(score)])))
        if not losses:
            return
        _, number, option = min(losses)
        assembly.at[number] = option
    for _ in range(1000):
        before = assembly.total()
        kept = assembly.at.copy()
        assembly.enlarge(max(budget - before, 0.0) if budget - before < 1.0 else 1.0)
        if assembly.total() > budget * (1.0 + 1e-9) or np.array_equal(kept, assembly.at):
            assembly.at = kept
            return
