"""Checks a proof of "no fewer sites" with its own small arithmetic: no solver, nothing of the room that made the proof.

Every step is weak duality. For vectors z_k, y ≥ 0, μ₀ ≥ 0 and any μ, every 0/1 choice w of cost ≤ n that meets limits, rules
and the counts of the step's place in the tree has

    Σ y_k ((c_k·z_k/τ_k)² − z_kᵀP₀z_k) ≤ μ₀ n + Σ_R μ_R·(upper count if μ_R > 0, else lower) + Σ_i max(Pᵢ lowerᵢ, Pᵢ upperᵢ),
    Pᵢ = Σ y_k‖Bᵢz_k‖² − μ₀ costᵢ − Σ_{R∋i} μ_R,

because a limit demands Σ wᵢ‖Bᵢz‖² + zᵀP₀z ≥ (c·z/τ)² for every z. The left side is rounded down and the right side up, by
error bounds of floating-point sums (Higham 2002, section 3.1): where the left still exceeds the right, there is no such w.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.errors import CertificateError
from sampler.tasks.pattern_check import pattern_bound

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

UNIT = 2.0**-53
BLOCK_ERROR = 1e-13
"""The rebuilt readings and directions are true to this share of the largest reading of each term: a few roundings."""
HELD_COEFFICIENTS = 40_000_000
"""Up to this many coefficients are held (320 MB); beyond it each step forms its own."""
CLOSE = 1 - 1e-12
"""Sites at just the spacing, whatever the rounding of their distance, are not too close."""
FULL_RANK = 1e-7
SPLIT, FIX, LEAF = 0, 1, 2
SQUARE, NAMED = -1, -2


def gamma(terms: int) -> float:
    """Relative error bound of a sum of so many products, with some to spare."""
    return 1.1 * (terms + 4) * UNIT


@dataclass(frozen=True, slots=True)
class Evidence:
    """The question, rebuilt: whitened `blocks` (n, m, p), `prior` (p, p), `cost` (n,), fixed sites, rules as (mask, least,
    most), and `key` (n,). Any `lost` chosen sites may be lost; sites at `xy` (n, 2) closer than `spacing` may not both be
    chosen. `directions(rows)` gives c/τ of each row of a certificate, (R, p), or raises CertificateError."""

    blocks: Array
    prior: Array
    cost: Array
    required: Mask
    forbidden: Mask
    rules: tuple[tuple[Mask, float, float], ...]
    key: NDArray[Any]
    directions: Callable[[dict[str, Any]], Array]
    lost: int = 0
    xy: Array | None = None
    spacing: float = 0.0


@dataclass(frozen=True, slots=True)
class Proven:
    """No set of cost below `lower_bound` meets limits and rules; `how` says by what."""

    lower_bound: float
    how: str


def check_proof(evidence: Evidence, certificate: dict[str, Any]) -> Proven:
    """What the certificate proves. Raises CertificateError, naming the place, when it does not prove what it claims."""
    kind = certificate.get("kind")
    if kind not in ("tree", "bound", "counting", "patterns"):
        raise CertificateError(f'certificate: kind is {kind!r}; allowed are "tree", "bound", "counting" and "patterns"')
    if certificate.get("format") != 1:
        raise CertificateError(f"certificate: format is {certificate.get('format')!r}; this program reads format 1")
    if certificate.get("candidates") != len(evidence.blocks):
        raise CertificateError(f"certificate: made for {certificate.get('candidates')!r} candidates; study and layout give "
                               f"{len(evidence.blocks)}")
    try:
        if kind == "counting":
            return _counting(evidence, certificate)
        if kind == "patterns":
            return _patterns(evidence, certificate)
        with np.errstate(over="ignore", invalid="ignore"):  # what overflows is infinite or no number, and closes nothing
            return _Walk(evidence, certificate).run()
    except (KeyError, TypeError, ValueError, IndexError, OverflowError) as error:
        raise CertificateError(f"certificate: damaged, {type(error).__name__}: {error}") from error


def _counting(evidence: Evidence, certificate: dict[str, Any]) -> Proven:
    """n sites whose BᵢL have at most m rows that are not zero leave a direction unseen when n·m < q = rank(C·L)."""
    basis = np.asarray(certificate["basis"], float)
    claimed = float(certificate["excludes"])
    if not np.isfinite(basis).all() or not np.isfinite(claimed):
        raise CertificateError("certificate: basis or excludes is not finite")
    if (evidence.prior @ basis).any():
        raise CertificateError("certificate: basis touches terms with a prior")
    each = int((evidence.blocks @ basis != 0.0).any(axis=2).sum(axis=1).max())
    asked = evidence.directions(certificate["rows"]) @ basis
    asked = asked / np.maximum(np.linalg.norm(asked, axis=1, keepdims=True), np.finfo(float).tiny)
    size = np.linalg.svd(asked, compute_uv=False)
    q = basis.shape[1]
    if len(size) < q or size[q - 1] <= FULL_RANK * size[0]:
        raise CertificateError("certificate: rows do not ask about every direction of basis")
    least = -(-q // max(each, 1))
    cost = float(np.sort(evidence.cost)[:least].sum())
    most = min((upper for mask, _, upper in evidence.rules if mask.all()), default=np.inf)
    if not (cost * (1 - gamma(least)) > claimed or least > most):
        raise CertificateError(f"certificate: rank needs cost {cost:g}, which does not exclude {claimed:g}")
    return Proven(_next(evidence.cost, claimed), f"counting: {q} unknown directions, at most {each} per site")


def _patterns(evidence: Evidence, certificate: dict[str, Any]) -> Proven:
    claimed = float(certificate["lower_bound"])
    proven, tried = pattern_bound(evidence.blocks, evidence.prior, evidence.cost, evidence.required, evidence.forbidden,
                                  evidence.rules, evidence.key, evidence.directions(certificate["rows"]), certificate)
    if not proven >= claimed - 1e-6 * max(1.0, abs(claimed)):
        raise CertificateError(f"certificate: the patterns give the bound {proven:.9g}, not {claimed:.9g}")
    return Proven(proven, f"{tried} sets of sites within cells, all {len(evidence.blocks)} candidates")


def _next(cost: Array, excluded: float) -> float:
    """The least cost above an excluded one: the next whole number when costs are whole."""
    return np.floor(excluded + 1e-9) + 1.0 if (cost == np.rint(cost)).all() else excluded


@dataclass(slots=True)
class _Place:
    lower: NDArray[np.int8]
    upper: NDArray[np.int8]
    least: dict[int, int]
    most: dict[int, int]


class _Walk:
    """One walk through the steps of a proof, in preorder."""

    def __init__(self, evidence: Evidence, certificate: dict[str, Any]) -> None:
        self.evidence = evidence
        self.kind = certificate["kind"]
        self.claim = float(certificate["excludes"] if self.kind == "tree" else certificate["lower_bound"])
        if not np.isfinite(self.claim):
            raise CertificateError("certificate: the claim is not finite")
        n, _, p = evidence.blocks.shape
        self.largest = np.abs(evidence.blocks).max(axis=(0, 1), initial=0.0)
        self.z = _finite(certificate["rows"]["z"], "rows.z").reshape(-1, p)
        self.income = self._income(evidence.directions(certificate["rows"]))
        self.masks = self._half_spaces(certificate["halves"])
        self.cliques = self._cliques(certificate.get("cliques", []))
        self.losses = self._losses(certificate.get("losses", []))
        steps = certificate["steps"]
        self.steps = [np.asarray(steps[name]).astype(int) for name in ("kind", "split", "at_most")]
        self.budget = _finite(steps["budget"], "steps.budget")
        self.y, self.counts, self.rules = (_sparse(steps[name], name, len(self.budget)) for name in ("y", "counts", "rules"))
        if any(len(column) != len(self.budget) for column in self.steps):
            raise CertificateError("certificate: steps columns differ in length")
        self.coefficients = self._coefficients(np.arange(len(self.z))) if n * len(self.z) <= HELD_COEFFICIENTS else None

    def _income(self, directions: Array) -> Array:
        """(c·z/τ)² − zᵀP₀z of each row, rounded down, (R,)."""
        if directions.shape != self.z.shape:
            raise CertificateError(f"certificate: {len(self.z)} rows, {len(directions)} limits")
        p = self.z.shape[1]
        seen = np.abs((directions * self.z).sum(axis=1))
        error = (gamma(p) + BLOCK_ERROR) * (np.abs(directions) * np.abs(self.z)).sum(axis=1)
        prior, z = self.evidence.prior, np.abs(self.z)
        held = ((self.z @ prior) * self.z).sum(axis=1) + 2 * gamma(p * p) * ((z @ np.abs(prior)) * z).sum(axis=1)
        return np.maximum(seen - error, 0.0) ** 2 * (1 - 4 * UNIT) - held

    def _coefficients(self, rows: NDArray[np.int64]) -> Array:
        """‖Bᵢz‖² rounded up, (rows, n)."""
        n, m, p = self.evidence.blocks.shape
        total = np.zeros((len(rows), n))
        error = (gamma(p) + BLOCK_ERROR) * (np.abs(self.z[rows]) @ self.largest)[:, None]
        for axis in range(m):
            total += (np.abs(self.z[rows] @ self.evidence.blocks[:, axis].T) + error) ** 2
        total *= 1 + gamma(m)
        for place, row in enumerate(rows):
            if int(row) in self.losses:
                gone, within = self.losses[int(row)]
                total[place, gone] = 0.0
                for half, theta in within:
                    total[place, self.masks[half]] = np.maximum(total[place, self.masks[half]], theta)
        return total

    def _cliques(self, halves: Any) -> list[int]:
        """Half-spaces whose sites may not be chosen together: all closer than the spacing."""
        evidence = self.evidence
        for half in (found := [int(half) for half in halves]):
            if evidence.xy is None or not 0 <= half < len(self.masks):
                raise CertificateError(f"certificate: clique {half} needs a spacing and a half-space of its own")
            at = evidence.xy[self.masks[half]]
            if len(at) > 1 and not np.linalg.norm(at[:, None] - at, axis=2).max() < evidence.spacing * CLOSE:
                raise CertificateError(f"certificate: two sites of clique {half} are not closer than the spacing")
        return found

    def _losses(self, losses: Any) -> dict[int, tuple[Mask, list[tuple[int, float]]]]:
        """Rows that hold after a loss: which sites are lost, and the half-spaces that lose their best with their θ."""
        found: dict[int, tuple[Mask, list[tuple[int, float]]]] = {}
        for loss in losses:
            row, keys = int(loss["row"]), list(loss["keys"])
            within = [(int(half), float(theta)) for half, theta in zip(loss["half"], loss["theta"], strict=True)]
            if not 0 <= row < len(self.z) or row in found or len(keys) + len(within) > self.evidence.lost:
                raise CertificateError(f"certificate: row {row} loses more than {self.evidence.lost} sites, or is named twice")
            if any(not 0 <= half < len(self.masks) or not theta >= 0 for half, theta in within) or (
                    len(within) > 1 and np.sum([self.masks[half] for half, _ in within], axis=0).max() > 1):
                raise CertificateError(f"certificate: row {row} names half-spaces that are not there, overlap or gain")
            found[row] = (np.isin(self.evidence.key, np.asarray(keys)) if keys else np.zeros(len(self.evidence.key), bool),
                          within)
            self.income[row] += sum(theta for _, theta in within) * (1 - 4 * UNIT)
        return found

    def _half_spaces(self, halves: dict[str, Any]) -> list[Mask]:
        """Which sites each half-space holds. Any set does for a split, so rounding at the edge cannot harm the proof."""
        blocks, masks = self.evidence.blocks, []
        vectors, thresholds = _finite(halves["vector"], "halves.vector"), _finite(halves["threshold"], "halves.threshold")
        for axis, vector, threshold, keys in zip(np.asarray(halves["axis"]).astype(int), vectors, thresholds,
                                                 halves["keys"], strict=True):
            if axis == NAMED:
                masks.append(np.isin(self.evidence.key, np.asarray(keys)))
            elif axis == SQUARE:
                masks.append(((blocks @ vector) ** 2).sum(axis=1) <= threshold)
            elif 0 <= axis < blocks.shape[1]:
                masks.append(blocks[:, axis] @ vector <= threshold)
            else:
                raise CertificateError(f"certificate: a half-space names reading axis {axis}")
        return masks

    def run(self) -> Proven:
        required, forbidden = self.evidence.required, self.evidence.forbidden
        start = _Place(required.astype(np.int8), (~forbidden | required).astype(np.int8), {}, dict.fromkeys(self.cliques, 1))
        stack, leaves = [start], 0
        proven = np.inf
        for number in range(len(self.budget)):
            if not stack:
                raise CertificateError(f"certificate: steps go on after the proof is complete, at step {number}")
            place, kind = stack[-1], self.steps[0][number]
            if kind == SPLIT:
                stack.pop()
                stack += self._children(place, number)
                continue
            slack, price = self._slack(place, number)
            if kind == FIX:
                self._fix(place, slack, price)
            elif kind == LEAF and self.kind == "bound" and len(self.budget) == 1:
                stack.pop()
                proven = slack / float(self.budget[number])
            elif kind == LEAF and self.kind == "tree" and slack > 0:
                stack.pop()
                leaves += 1
            else:
                raise CertificateError(f"certificate: step {number} does not close its part of the tree "
                                       f"(short by {-slack:.3g})")
        if stack:
            raise CertificateError(f"certificate: {len(stack)} parts of the tree are left open at its end")
        candidates = len(self.evidence.blocks)
        if self.kind == "tree":
            return Proven(_next(self.evidence.cost, self.claim),
                          f"{leaves} parts of a tree, {len(self.z)} covering rows, all {candidates} candidates")
        if proven < self.claim - 1e-6:
            raise CertificateError(f"certificate: the rows give the bound {proven:.9g}, not {self.claim:.9g}")
        return Proven(proven, f"{len(self.z)} covering rows over all {candidates} candidates")

    def _children(self, place: _Place, number: int) -> list[_Place]:
        """Both children, the one visited first ("at most") last."""
        split, at_most = int(self.steps[1][number]), int(self.steps[2][number])
        if not 0 <= split < len(self.masks):
            raise CertificateError(f"certificate: step {number} splits on half-space {split}, which is not there")
        more = _Place(place.lower.copy(), place.upper.copy(), dict(place.least), dict(place.most))
        more.least[split] = max(at_most + 1, place.least.get(split, 0))
        place.most = {**place.most, split: min(at_most, place.most.get(split, len(place.upper)))}
        return [more, place]

    def _slack(self, place: _Place, number: int) -> tuple[float, Array]:
        """Left side less right side, rounded down, and each Pᵢ rounded up; for a bound, without μ₀·n on the right."""
        rows, y = self.y(number)
        budget = float(self.budget[number])
        if (y < 0).any() or budget < 0 or (self.kind == "bound" and budget == 0):
            raise CertificateError(f"certificate: step {number} has a negative multiplier")
        for row in rows[y > 0]:
            if any(place.least.get(half, 0) < 1 for half, _ in self.losses.get(int(row), (None, []))[1]):
                raise CertificateError(f"certificate: step {number} takes a half-space to hold a site that may hold none")
        held = self._coefficients(rows) if self.coefficients is None else self.coefficients[rows]
        income = float(y @ self.income[rows])
        size = float(y @ np.abs(self.income[rows]))
        price = y @ held * (1 + gamma(len(rows)))
        error = price.copy()
        price -= budget * self.evidence.cost
        error += budget * self.evidence.cost
        right = budget * self.claim if self.kind == "tree" else 0.0
        size += right
        for sets, pairs in ((self._rules(), self.rules(number)), (self._counts(place), self.counts(number))):
            for index, mu in zip(*pairs, strict=True):
                mask, least, most = sets(int(index))
                bound = most if mu > 0 else least
                if not np.isfinite(bound):
                    raise CertificateError(f"certificate: step {number} leans on a count that has no bound there")
                right += mu * bound
                size += abs(mu * bound)
                price[mask] -= mu
                error[mask] += abs(mu)
        price += error * gamma(8 + len(self.masks))
        each = np.maximum(price * place.lower, price * place.upper)
        size += float(np.abs(each).sum())
        return income - right - float(each.sum()) - size * gamma(len(each) + len(rows) + len(self.masks)), price

    def _rules(self) -> Callable[[int], tuple[Mask, float, float]]:
        return self.evidence.rules.__getitem__

    def _counts(self, place: _Place) -> Callable[[int], tuple[Mask, float, float]]:
        return lambda split: (self.masks[split], place.least.get(split, 0), place.most.get(split, np.inf))

    def _fix(self, place: _Place, slack: float, price: Array) -> None:
        """Sites that no set of this part can have, or do without: their price alone closes the other side."""
        spare = 8 * UNIT * (abs(slack) + np.abs(price))
        free = place.lower < place.upper
        out = free & (price < 0) & (slack - price - spare > 0)
        into = free & (price > 0) & (slack + price - spare > 0)
        place.upper = np.where(out, 0, place.upper).astype(np.int8)
        place.lower = np.where(into, 1, place.lower).astype(np.int8)


def _finite(values: Any, name: str) -> Array:
    array = np.asarray(values, float)
    if not np.isfinite(array).all():
        raise CertificateError(f"certificate: {name} has a value that is not finite")
    return array


def _sparse(columns: dict[str, Any], name: str, length: int) -> Callable[[int], tuple[NDArray[np.int64], Array]]:
    """Step number -> (indices, values)."""
    start, index = np.asarray(columns["start"]).astype(np.int64), np.asarray(columns["index"]).astype(np.int64)
    value = _finite(columns["value"], f"steps.{name}")
    if len(start) != length + 1 or start[0] != 0 or start[-1] != len(index) or len(index) != len(value) \
            or (np.diff(start) < 0).any() or (index < 0).any():
        raise CertificateError(f"certificate: steps.{name} is damaged")
    return lambda number: (index[start[number]:start[number + 1]], value[start[number]:start[number + 1]])
