"""Can sites of cost at most n meet every limit? A depth-first tree that branches on counts, with a proof either way.

A node holds 0/1 bounds of the sites and bounds on how many sites lie in some half-spaces. Its relaxation is
max t subject to Σᵢ wᵢ‖Bᵢz_k‖² + z_kᵀP₀z_k ≥ t for covering rows z_k: t(w) = 1 / (worst variance ratio at w), so a set
needs t ≥ 1. For any multipliers y ≥ 0 of the rows, μ₀ ≥ 0 of the budget and μ_R of the counts (weak duality),

    t · Σy ≤ Σ y_k z_kᵀP₀z_k + μ₀ n + Σ_R μ_R · (upper count if μ_R > 0, else lower) + Σ_i max(Pᵢ lowerᵢ, Pᵢ upperᵢ),
    Pᵢ = Σ_k y_k‖Bᵢz_k‖² − μ₀ costᵢ − Σ_{R∋i} μ_R,

over all candidates i. A node is closed only on this number, recomputed here; the same number with Pᵢ fixes sites.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import Split
from sampler.optimise.branching import CAPS, HalfSpace, Splits
from sampler.optimise.certificate import counting_certificate, tree_certificate
from sampler.optimise.gram import Gram, Row, cover
from sampler.optimise.loss_rows import Weighed, lost_rows, within_rows
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.node_program import CLOSED_T, NodeProgram, Solution
from sampler.optimise.problem import SiteProblem
from sampler.optimise.rows import RowPool
from sampler.optimise.spacing import Discs, spaced
from sampler.optimise.steps import Multipliers, Step

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

MARGIN = 1e-7
"""A node is closed or a site fixed only with this much to spare, relative to the terms summed: rounding is far smaller."""
INTEGRAL = 1e-7
FEASIBLE = 1.0 + 1e-9
"""A set counts as found when every variance ratio is at most this."""
RIDGE = 1e-9
"""Share of the mean diagonal added to M in the separation step only: any z gives a valid row."""
FIRST_COLUMNS = 100
MOST_ROUNDS = 200
"""Rows or columns are added at most so often in one node before it is branched on as it stands."""
LEAST_LOSS = 1e-4
LOST_ROWS = 8
NEW_CLIQUES = 12
"""Rows added at a time for losses, and for spacing."""
WITHIN_SHARE = 0.3
"""Of sets known to hold a site those with at most this share of all are looked at for rows."""
LOST_PROGRAM_ROWS, NEARLY_BINDS = 300, 0.03
"""With losses the program grows beyond the first, and is then rebuilt from the rows with less slack than the second."""
MOST_CLUSTERS, CLUSTER_TRIES, CLUSTER_WEIGHT, CLUSTER_SHARE, CLUSTER_REACH, LEAST_GAP = 14, 30, 1.0, 0.25, 0.7, 1.3
"""So many clusters that surely hold a site are sought, among the balls around so many sites: of at least CLUSTER_WEIGHT and at
most CLUSTER_SHARE of the sites. A ball reaches CLUSTER_REACH of the way to the next site of weight, which is LEAST_GAP times
as far as the last one inside."""
RECENT = 8
"""Discs stay in the program for so many nodes after they last mattered."""
PROGRAM_ROWS = 100
PROGRAM_COLUMNS = 250
"""The program is rebuilt with what was used lately when it holds more than this."""


@dataclass(frozen=True, slots=True)
class Decision:
    """`status` "possible" (`chosen` sorted indices meet limits and rules), "impossible" (`certificate`), or "open".

    `weights` (n,): those of the root, which know of losses and spacing, when it was not closed.
    """

    status: str
    chosen: Indices | None
    certificate: dict[str, Any] | None
    nodes: int
    seconds: float
    weights: Array | None = None


@dataclass(slots=True)
class _Node:
    lower: NDArray[np.int8]
    upper: NDArray[np.int8]
    path: tuple[tuple[int, bool, int], ...]  # (split, at most?, count)
    sites: Indices
    w: Array  # the parent's weights, on `sites`
    anchors: tuple[HalfSpace, ...] = ()  # clusters to branch on before anything else


class Tree:
    """The search for one count. Sites are in the order of their keys; `order` maps back."""

    def __init__(self, split: Split, problem: SiteProblem, count: float, weights: Array | None = None,
                 first_columns: int = FIRST_COLUMNS,
                 rows: RowPool | None = None) -> None:
        self.split, self.problem, self.count = split, problem, float(count)
        self.order = np.argsort(problem.key, kind="stable")
        inverse = np.empty_like(self.order)
        inverse[self.order] = np.arange(len(self.order))
        self.n = problem.n
        self.cost = problem.cost[self.order].astype(float)
        self.blocks = split.blocks
        self.gram = Gram(split, self.order)
        self.splits = Splits(split, problem, self.order)
        self.rules: list[tuple[NDArray[np.bool_], float, float]] = []
        for members, low, high in zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True):
            mask = np.zeros(self.n, bool)
            mask[inverse[members]] = True
            self.rules.append((mask, float(low), float(high)))
        if problem.max_sites is not None:
            self.rules.append((np.ones(self.n, bool), -np.inf, float(problem.max_sites)))
        self.lost = problem.lost
        self.discs = Discs(problem.xy[self.order], problem.spacing) if problem.xy is not None and problem.spacing > 0 else None
        self.cliques: list[int] = []       # splits of which any set holds at most one site
        self.clique_used: dict[int, int] = {}
        self.most_held = LOST_PROGRAM_ROWS
        self.root_weights: Array | None = None
        self.anchors: list[int] = []       # splits of clusters, see `_anchor`
        self.pool: list[Row] = []
        self.proof: list[Step] = []
        self.halves: list[HalfSpace] = []
        self.masks: list[NDArray[np.bool_]] = []
        self.nodes = 0
        self.undecided = False
        lower = problem.required[self.order].astype(np.int8)
        upper = np.maximum(~problem.forbidden[self.order], lower).astype(np.int8)
        free = np.flatnonzero(upper)
        rng = np.random.default_rng(0)
        first = rng.permutation(free)[:first_columns]
        if weights is not None:
            heavy = np.argsort(-weights[self.order], kind="stable")[:first_columns]
            first = np.concatenate([heavy[weights[self.order][heavy] > 0], first])
        first = np.unique(np.concatenate([np.flatnonzero(lower), first[:max(first_columns, 1)]]))
        self.held: list[int] = []          # pool rows in the program
        self.counted: list[int] = []       # splits in the program
        self.program = NodeProgram(self.count)
        if rows is not None:
            self.pool = [_pool_row(split, rows, index) for index in range(len(rows))]
        self._build(first, list(range(len(self.pool)))[:PROGRAM_ROWS], [])
        w = np.full(len(free), min(1.0, self.count / max(len(free), 1)))
        self.stack = [_Node(lower, upper, (), free, w)]

    # -- the program -------------------------------------------------------------------------------------------------

    def _build(self, sites: Indices, rows: list[int], splits: list[int]) -> None:
        self.program = NodeProgram(self.count)
        self.held, self.counted = rows, splits
        self.program.add_sites(sites, self.cost[sites], np.zeros((0, len(sites))), np.zeros((0, len(sites))))
        for mask, _, _ in self.rules:
            self.program.add_count(mask[sites])
        for split in splits:
            self.program.add_count(self.masks[split][sites])
        for row in rows:
            self.program.add_cover(self._coefficients([self.pool[row]], sites)[:, 0], self.pool[row].prior)
        self.row_used = [self.nodes] * len(rows)
        self.site_used = np.full(len(sites), self.nodes)

    def _purge(self, path: tuple[tuple[int, bool, int], ...]) -> None:
        """Rebuild the program from what recent nodes used."""
        on_path = [split for split, _, _ in path]
        on_path += [split for split, when in self.clique_used.items() if when >= self.nodes - RECENT and split not in on_path]
        program = self.program
        if not (len(self.held) > PROGRAM_ROWS or len(program.sites) > PROGRAM_COLUMNS
                or len(self.counted) > len(on_path) + 30):
            return
        newest = np.sort(np.array(self.row_used))[::-1]
        row_from = newest[min(PROGRAM_ROWS // 2, len(newest) - 1)] if len(newest) else 0
        used = np.sort(self.site_used)[::-1]
        site_from = used[min(PROGRAM_COLUMNS // 2, len(used) - 1)]
        rows = [row for row, when in zip(self.held, self.row_used, strict=True) if when >= row_from]
        sites = np.array(program.sites)[self.site_used >= site_from]
        self._build(sites, rows[-PROGRAM_ROWS // 2:], on_path)

    def _shed(self, node: _Node) -> None:
        """Losses give very many rows: rebuild the program from those that are near to binding."""
        slack = self.program.cover_slack([self.pool[row].prior for row in self.held])
        kept = [row for row, spare in zip(self.held, slack, strict=True) if spare < NEARLY_BINDS]
        self.most_held = max(LOST_PROGRAM_ROWS, 2 * len(kept))
        self._build(np.array(self.program.sites), kept, self.counted)
        self._enter(node)

    def _add_row(self, row: Row) -> None:
        sites = np.array(self.program.sites)
        self.program.add_cover(self._coefficients([row], sites)[:, 0], row.prior)
        self.held.append(len(self.pool))
        self.row_used.append(self.nodes)
        self.pool.append(row)

    def _add_sites(self, sites: Indices) -> None:
        coefficients = self._coefficients([self.pool[row] for row in self.held], sites)
        masks = [mask for mask, _, _ in self.rules] + [self.masks[split] for split in self.counted]
        counts = np.stack([mask[sites] for mask in masks]).astype(float) if masks else np.zeros((0, len(sites)))
        self.program.add_sites(sites, self.cost[sites], coefficients.T, counts)
        self.site_used = np.concatenate([self.site_used, np.full(len(sites), self.nodes)])

    def _coefficients(self, rows: list[Row], sites: Indices) -> Array:
        """Coefficients of the sites in the rows, (sites, rows)."""
        if not rows:
            return np.zeros((len(sites), 0))
        found = self.gram.coefficients(np.stack([row.packed for row in rows], axis=1), sites)
        for column, row in enumerate(rows):
            if row.loss is not None:
                found[np.isin(sites, row.loss.sites), column] = 0.0
                for split, theta in row.loss.within:
                    held = self.masks[split][sites]
                    found[held, column] = np.maximum(found[held, column], theta)
        return found

    def _without_loss(self, row: Row) -> tuple[Indices, Array]:
        """The sites at which a row's coefficients are not those of its z, and by how much they are more."""
        lost, within = ((), ()) if row.loss is None else (row.loss.sites, row.loss.within)
        sites = np.unique(np.concatenate([np.asarray(lost, np.int64),
                                          *(np.flatnonzero(self.masks[split]) for split, _ in within)]))
        return sites, self._coefficients([row], sites)[:, 0] - self.gram.coefficients(row.packed, sites)

    def _usable(self, row: Row, node: _Node) -> bool:
        """Whether the sets that a row takes to hold a site do so at a node."""
        return row.loss is None or all(any(split == other and not at_most and count >= 1 for other, at_most, count in node.path)
                                       for split, _ in row.loss.within)

    def _enter(self, node: _Node) -> None:
        """Set the program to a node's bounds."""
        self._purge(node.path)
        for split, _, _ in node.path:
            if split not in self.counted:
                self.program.add_count(self.masks[split][self.program.sites])
                self.counted.append(split)
        low, high = self._counts(node)
        self.program.set_counts(low, high)
        self.program.set_bounds(node.lower[self.program.sites], node.upper[self.program.sites])
        for index, row in enumerate(self.pool[row] for row in self.held):
            if row.loss is not None and row.loss.within:
                self.program.use_cover(index, row.prior, self._usable(row, node))

    def _counts(self, node: _Node) -> tuple[Array, Array]:
        """Bounds of the program's count rows at a node; several bounds on one split keep the tightest."""
        low = np.full(len(self.rules) + len(self.counted), -np.inf)
        high = np.full(len(low), np.inf)
        for index, (_, least, most) in enumerate(self.rules):
            low[index], high[index] = least, most
        place = {split: len(self.rules) + index for index, split in enumerate(self.counted)}
        for split in self.cliques:
            if split in place:
                high[place[split]] = 1.0
        for split, at_most, count in node.path:
            if at_most:
                high[place[split]] = min(high[place[split]], count)
            else:
                low[place[split]] = max(low[place[split]], count)
        return low, high

    # -- rows --------------------------------------------------------------------------------------------------------

    def _variances(self, sites: Indices, w: Array) -> tuple[Array, list[Array]]:
        """Variance ratio of each limit at weights w on `sites`, and M_b⁻¹C_b of each block."""
        solved, variance = [], []
        for block in self.blocks:
            here = block.rows[self.order[sites]]
            information = block.prior + np.einsum("i,imp,imq->pq", w, here, here, optimize=True)
            part = np.asarray(np.linalg.solve(_ridged(information), block.columns), np.float64)
            solved.append(part)
            variance.append(np.einsum("qk,qk->k", block.columns, part))
        return self.split.variances(variance), solved

    def _new_rows(self, ratios: Array, solved: list[Array], most: int = 3, least_ratio: float = 1.0) -> list[Row]:
        """Rows of the worst limits, none nearly parallel to a worse one (correlation of the two estimates > 0.9)."""
        rows: list[Row] = []
        leads: list[tuple[int, Array, float]] = []  # block, M⁻¹c of the limit's first column there, its variance
        worst = np.argsort(-ratios, kind="stable")[:200]
        for limit in worst:
            if rows and (len(rows) == most or ratios[limit] < max(least_ratio, 0.5 * ratios[worst[0]])):
                break
            columns = [np.flatnonzero(block.owner == limit) for block in self.blocks]
            lead = max(range(len(columns)), key=lambda b: len(columns[b]))
            direction = self.blocks[lead].columns[:, columns[lead][0]]
            estimate = solved[lead][:, columns[lead][0]]
            variance = float(direction @ estimate)
            if any(block == lead and (direction @ other) ** 2 > 0.81 * variance * size for block, other, size in leads):
                continue
            leads.append((lead, estimate, variance))
            rows.append(cover(self.split, int(limit), [part[:, mine] / ratios[limit] for part, mine in
                                                       zip(solved, columns, strict=True)],
                              [block.lift[mine] for block, mine in zip(self.blocks, columns, strict=True)]))
        return rows

    # -- the bound ---------------------------------------------------------------------------------------------------

    def _price(self, node: _Node, solution: Solution) -> tuple[float, Array, float, Multipliers]:
        """Slack = Σy − (right side of the module's inequality), Pᵢ of all sites, and the margin slack must exceed.

        Positive slack closes the node; slack − Pᵢ > 0 for a free site with Pᵢ < 0 means wᵢ = 0, slack + Pᵢ > 0 with
        Pᵢ > 0 means wᵢ = 1.
        """
        low, high = self._counts(node)
        mu = solution.counts
        mu = np.where(mu > 0, np.where(np.isfinite(high), mu, 0.0), np.where(np.isfinite(low), mu, 0.0))
        y = np.array([value if self._usable(self.pool[row], node) else 0.0
                      for value, row in zip(solution.y, self.held, strict=True)])
        packed, prior = np.zeros(self.gram.width), 0.0
        active = np.flatnonzero(y > 0)
        for index in active:
            packed += y[index] * self.pool[self.held[index]].packed
            prior += y[index] * self.pool[self.held[index]].prior
            self.row_used[index] = self.nodes
        price = self.gram.coefficients(packed)
        for index in active:
            if self.pool[self.held[index]].loss is not None:
                sites, more = self._without_loss(self.pool[self.held[index]])
                price[sites] += y[index] * more
        price -= solution.budget * self.cost
        value = prior + solution.budget * self.count
        scale = abs(prior) + solution.budget * self.count + y.sum()
        rules, counts = [], []
        for index in np.flatnonzero(mu):
            mask = self.rules[index][0] if index < len(self.rules) else self.masks[self.counted[index - len(self.rules)]]
            price[mask] -= mu[index]
            bound = high[index] if mu[index] > 0 else low[index]
            value += mu[index] * bound
            scale += abs(mu[index]) * max(abs(bound), 1.0)
            if index < len(self.rules):
                rules.append((int(index), float(mu[index])))
            else:
                counts.append((self.counted[index - len(self.rules)], float(mu[index])))
                self.clique_used[self.counted[index - len(self.rules)]] = self.nodes
        value += np.maximum(price * node.lower, price * node.upper).sum()
        multipliers = Multipliers(np.array([self.held[index] for index in active], np.int64), y[active],
                                  solution.budget, tuple(rules), tuple(counts))
        return float(y.sum() - value), price, MARGIN * scale, multipliers

    def _fix(self, node: _Node, slack: float, price: Array, margin: float, multipliers: Multipliers) -> bool:
        """Fix what the prices decide; whether a site went in (the program's optimum is then another)."""
        free = node.lower < node.upper
        out = free & (slack - price > margin) & (price < 0)
        into = free & (slack + price > margin) & (price > 0)
        if not (out.any() or into.any()):
            return False
        node.upper = np.where(out, 0, node.upper).astype(np.int8)
        node.lower = np.where(into, 1, node.lower).astype(np.int8)
        self.proof.append(Step("fix", multipliers))
        return bool(into.any())

    # -- one node ----------------------------------------------------------------------------------------------------

    def _close(self, node: _Node, stop: Callable[[], bool]) -> tuple[Indices, Array] | Indices | None:
        """Work on a node: None when closed, sorted chosen sites when a set is found, else (sites, weights) to branch."""
        self._enter(node)
        centre: tuple[Indices, Array] | None = (node.sites, node.w)
        best_ratio = np.inf
        last_t = np.inf
        slow = 0
        sites, w = node.sites, node.w
        for _ in range(MOST_ROUNDS):
            if stop():
                break
            if self.lost and len(self.held) > self.most_held:
                self._shed(node)
            solution = self.program.solve()
            sites = np.array(self.program.sites)
            if solution is None:
                break
            w = np.clip(solution.w, node.lower[sites], node.upper[sites])
            self.site_used[w > INTEGRAL] = self.nodes
            if solution.t < 1.0:
                slack, price, margin, multipliers = self._price(node, solution)
                if slack > margin:
                    self.proof.append(Step("leaf", multipliers))
                    return None
                fresh = self._entering(node, price)
                if len(fresh):
                    self._add_sites(fresh)
                    at = np.array(self.program.sites)
                    self.program.set_bounds(node.lower[at], node.upper[at])
                    continue
            kept = w > 1e-12
            sites, w = sites[kept], w[kept]
            ratios, solved = self._variances(sites, w)
            worst = float(ratios.max(initial=0.0))
            found = self._found(sites, w)
            if found is not None:
                return found
            broken, after = self._broken(node, sites, w, ratios)
            if self._overfull(node, sites, w):
                for row in broken:
                    self._add_row(row)
                continue
            worst = max(worst, after)
            if worst <= 1.0:
                return sites, w
            if worst * solution.t <= 1.0 + 1e-9:  # the program is solved, and only the margin keeps the node open
                break
            rows = self._new_rows(ratios, solved) + broken if ratios.max(initial=0.0) > 1.0 else broken
            if centre is not None:
                middle = np.union1d(sites, centre[0])
                weight = np.zeros(self.n)
                weight[sites] += 0.5 * w
                weight[centre[0]] += 0.5 * centre[1]
                ratios, solved = self._variances(middle, weight[middle])
                broken, after = self._broken(node, middle, weight[middle], ratios)
                rows += (self._new_rows(ratios, solved) if not self.lost or ratios.max(initial=0.0) > 1.0 else []) + broken
                if max(ratios.max(initial=0.0), after) < best_ratio:
                    best_ratio, centre = max(float(ratios.max(initial=0.0)), after), (middle, weight[middle])
            for row in rows:
                self._add_row(row)
            slow = slow + 1 if last_t - solution.t < (0.02) * (solution.t - 1.0) else 0
            last_t = solution.t
            if slow >= 4:
                break
        return sites, w

    def _broken(self, node: _Node, sites: Indices, w: Array, ratios: Array) -> tuple[list[Row], float]:
        """Rows of limits that do not bear a loss, and the worst ratio after one."""
        if not self.lost:
            return [], 0.0
        at = Weighed(self.split, sites, w, [block.rows[self.order[sites]] for block in self.blocks], RIDGE)
        rows, worst = lost_rows(at, ratios, self.lost, LOST_ROWS)
        known = [(split, self.masks[split]) for split, at_most, count in node.path
                 if not at_most and count >= 1 and self.masks[split].mean() <= WITHIN_SHARE]
        return rows + within_rows(at, ratios, known, LOST_ROWS), worst

    def _overfull(self, node: _Node, sites: Indices, w: Array) -> bool:
        """Adds the discs that hold more than one site's weight; whether there were any."""
        found = [] if self.discs is None else self.discs.overfull(sites, w, NEW_CLIQUES)
        for members in found:
            mask = np.zeros(self.n, bool)
            mask[members] = True
            self.cliques.append(self._named(mask))
            self.program.add_count(mask[self.program.sites])
            self.counted.append(self.cliques[-1])
            self.clique_used[self.cliques[-1]] = self.nodes
        if found:
            self.program.set_counts(*self._counts(node))
        return bool(found)

    def _named(self, mask: NDArray[np.bool_]) -> int:
        """A new split on the sites named."""
        self.halves.append(self.splits.named(mask))
        self.masks.append(mask)
        return len(self.halves) - 1

    def _entering(self, node: _Node, price: Array) -> Indices:
        """Sites to give a column: the best priced, no two nearly alike."""
        good = price > 0
        good[self.program.sites] = False
        good &= node.upper > 0
        at = np.flatnonzero(good)
        if not len(at):
            return at
        at = at[np.argsort(-price[at], kind="stable")][:60]
        packed = self.gram.of(at)
        packed = packed / np.linalg.norm(packed, axis=1, keepdims=True)
        alike = packed @ packed.T > 0.998
        kept: list[int] = []
        for index in range(len(at)):
            if not alike[index, kept].any():
                kept.append(index)
        return at[kept]

    def _found(self, sites: Indices, w: Array) -> Indices | None:
        if (np.abs(w - np.rint(w)) > INTEGRAL).any():
            return None
        chosen = np.sort(self.order[sites[w > 0.5]])
        mask = np.zeros(self.n, bool)
        mask[sites[w > 0.5]] = True
        if mask @ self.cost > self.count + 1e-9 or not all(low <= (mask & rule).sum() <= high
                                                           for rule, low, high in self.rules):
            return None
        if self.discs is not None and not spaced(self.discs.xy[sites[w > 0.5]], self.problem.spacing):
            return None
        return chosen if ratios_after_loss(self.split, chosen, self.lost).max(initial=0.0) <= FEASIBLE else None

    def run(self, stop: Callable[[], bool], progress: Callable[[float, float], None] | None = None
            ) -> tuple[str, Indices | None]:
        """The whole search: status and the chosen set."""
        while self.stack:
            if progress is not None and self.nodes % 16 == 0:
                progress(self.count, np.inf)
            if stop():
                return "open", None
            node = self.stack.pop()
            self.nodes += 1
            outcome = self._close(node, stop) if not node.anchors else (node.sites, node.w)
            if outcome is None:
                continue
            if isinstance(outcome, np.ndarray):
                return "possible", outcome
            if self.nodes == 1:
                self.root_weights = np.zeros(self.n)
                self.root_weights[self.order[outcome[0]]] = outcome[1]
            if stop():
                return "open", None
            self._branch(node, *outcome)
        return ("open" if self.undecided else "impossible"), None

    def certificate(self) -> dict[str, Any]:
        """The proof that was written down, once `run` says "impossible"."""
        return tree_certificate(self.split, self.problem, self.count, self.pool, self.halves, self.proof,
                                self.order, self.cliques)

    def _branch(self, node: _Node, sites: Indices, w: Array) -> None:
        anchors = node.anchors
        if not anchors:
            solution = self.program.solve()
            if solution is not None:
                slack, price, margin, multipliers = self._price(node, solution)
                if slack > margin:
                    self.proof.append(Step("leaf", multipliers))
                    return
                self._fix(node, slack, price, margin, multipliers)
            anchors = self._clusters(node, sites, w) if self.lost else ()
        half = anchors[0] if anchors else self._best_split(sites, w) or self.splits.single(sites, w) or self._undecided(node)
        if half is None:
            self.undecided = True
            return
        self.halves.append(half)
        self.masks.append(half.mask)
        split = len(self.halves) - 1
        if anchors:
            self.anchors.append(split)
        self.proof.append(Step("split", None, split, half.at_most))
        for at_most, count in ((False, half.at_most + 1), (True, half.at_most)):
            self.stack.append(_Node(node.lower.copy(), node.upper.copy(), (*node.path, (split, at_most, count)),
                                    sites, w, () if at_most else anchors[1:]))

    def _undecided(self, node: _Node) -> HalfSpace | None:
        """A site that the node leaves open, for weights that are whole though not all rows were looked at."""
        if not self.lost:
            return None
        open_ = node.lower < node.upper
        for split, _, _ in node.path:
            if self.masks[split].sum() == 1:
                open_ &= ~self.masks[split]
        first = np.flatnonzero(open_)[:1]
        return self.splits.named(np.isin(np.arange(self.n), first)) if len(first) else None

    def _best_split(self, sites: Indices, w: Array) -> HalfSpace | None:
        """Strong branching: of the splits proposed, the one whose children lose most t, by the product of both losses."""
        ratios, solved = self._variances(sites, w)
        worst = [(block, z[:, k]) for row in self._new_rows(ratios, solved, 3, 0.0) for block, z in enumerate(row.z)
                 for k in range(z.shape[1])]
        at, t = self.program.sites, self.program.t
        best, best_score = None, -np.inf
        for half in self.splits.propose(sites, w, worst, self._caps(sites, w)):
            losses = [max(t - max(child, CLOSED_T), LEAST_LOSS) for child in self.program.trial(half.mask[at], half.at_most)]
            if losses[0] * losses[1] > best_score:
                best, best_score = half, losses[0] * losses[1]
        return best

    def _clusters(self, node: _Node, sites: Indices, w: Array) -> tuple[HalfSpace, ...]:
        """Clusters of sites alike that probably hold a chosen site each, so that their best may be lost: of the balls around
        heavy sites, apart from each other and from the node's own, those with the widest gaps around them."""
        known = [split for split, _, _ in node.path if split in self.anchors]
        covered = np.any([self.masks[split] for split in known], axis=0) if known else np.zeros(self.n, bool)
        rows = np.concatenate([block.rows.reshape(self.n, -1) for block in self.blocks], axis=1)[self.order]
        found: list[HalfSpace] = []
        while len(known) + len(found) < MOST_CLUSTERS:
            outside = np.flatnonzero(~covered[sites])
            best, best_gap = None, LEAST_GAP
            for centre in sites[outside[np.argsort(-w[outside], kind="stable")[:CLUSTER_TRIES]]]:
                distance = np.linalg.norm(rows[sites[outside]] - rows[centre], axis=1)
                order = np.argsort(distance, kind="stable")
                reach, held = distance[order], np.cumsum(w[outside][order])
                enough = np.flatnonzero(held[:-1] >= CLUSTER_WEIGHT)
                gaps = reach[enough + 1] / np.maximum(reach[enough], 1e-3 * reach[-1:] + 1e-300)
                if len(gaps) and gaps.max() > best_gap:
                    at = enough[int(np.argmax(gaps))]
                    mask = np.linalg.norm(rows - rows[centre], axis=1) <= \
                        CLUSTER_REACH * reach[at + 1] + (1 - CLUSTER_REACH) * reach[at]
                    mask &= ~covered
                    if mask.mean() <= CLUSTER_SHARE:
                        best, best_gap = mask, gaps.max()
            if best is None:
                break
            found.append(self.splits.named(best))
            covered |= best
        return tuple(found)

    def _caps(self, sites: Indices, w: Array) -> list[tuple[int, Array]]:
        """(block, −M⁻¹bᵢ) of the most fractional sites i: bᵢᵀM⁻¹b is large for the sites that tell the same as i.

        Near the edge of feasibility weight spreads over such neighbours, so that counting a cap is what decides.
        """
        most = np.argsort(-np.minimum(w, 1 - w), kind="stable")[:CAPS]
        caps = []
        for number, block in enumerate(self.blocks):
            here = block.rows[self.order[sites]]
            solved = np.linalg.solve(_ridged(block.prior + np.einsum("i,imp,imq->pq", w, here, here, optimize=True)),
                                     here[most].reshape(-1, block.q).T)
            caps += [(number, -z) for z in solved.T]
        return caps


def _ridged(information: Array) -> Array:
    q = len(information)
    return information + (RIDGE * np.trace(information) / max(q, 1) + 1e-14) * np.eye(q)


def _pool_row(split: Split, rows: RowPool, index: int) -> Row:
    mine = [np.flatnonzero(row == index) for row in rows.row]
    return cover(split, int(rows.limit[index]), [z[:, k] for z, k in zip(rows.pieces, mine, strict=True)],
                 [lift[k] for lift, k in zip(rows.lift, mine, strict=True)])


def decide(split: Split, problem: SiteProblem, count: float, *, rows: RowPool | None = None, weights: Array | None = None,
           seconds: float = np.inf, stop: Callable[[], bool] | None = None,
           progress: Callable[[float, float], None] | None = None) -> Decision:
    """Whether sites of total cost ≤ count meet every limit and rule: found, proven impossible, or open when time ends.

    `rows` and `weights` (n,) of a relaxation start the tree warm. `progress(count, inf)` is a sign of life.
    """
    started = time.monotonic()

    def ended() -> bool:
        return time.monotonic() - started > seconds or (stop is not None and stop())

    certificate = counting_certificate(split, problem, count)
    if certificate is not None:
        return Decision("impossible", None, certificate, 0, time.monotonic() - started)
    tree = Tree(split, problem, count, weights, rows=rows)
    status, chosen = tree.run(ended, progress)
    if status == "impossible":
        certificate = tree.certificate()
    return Decision(status, chosen, certificate, tree.nodes, time.monotonic() - started, tree.root_weights)
