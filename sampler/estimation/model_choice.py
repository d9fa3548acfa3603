"""Which model the panels call for: a ladder of models, judged on readings that they were not fitted to.

Everything follows from small matrices of products of [panel and shared terms | cell terms | reading], summed over each
cell and quarter of a cell: a model is a choice of columns, leaving readings out is a subtraction, terms of single cells
drop out cell by cell.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree
from scipy.special import fdtrc

from sampler.estimation.least_squares import Factored
from sampler.estimation.readings import Averages, Pattern, Readings
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.model.terms import FAMILIES
from sampler.panel.layout import Layout

Array = NDArray[np.float64]
Codes = NDArray[np.int64]
Key = tuple[str, bool, bool]  # family, shared terms, single cells' terms

LADDER = {"similarity": ("similarity",), "affine": ("affine",), "trapezoid": ("affine", "trapezoid"), "order2": ("order2",),
          "order3": ("order3",)}
"""Each rung holds the one below."""
SHARED = ("scale_x", "scale_y", "rotation", "orthogonality")
EACH = FAMILIES["similarity"]
"""Terms tried for a grid: those that all its cells share, and those that each cell has of its own."""
LEAST_CELLS = 4
SURE = 3.0
"""Steps between cells are believed from this many standard errors on."""
BLOCKS = 4
"""Without a grid, whole blocks of the panel are left out, BLOCKS × BLOCKS of them."""
QUARTERS = 4
RANK_TOLERANCE = 1e-9
"""Directions of the scaled products below this share of the largest are not determined; they are then left at zero."""


@dataclass(frozen=True, slots=True)
class Rung:
    """One model tried: a family of panel terms, and whether the grid's shared terms and its single cells' are with it.

    `terms` of it one panel determines on average. `residual_um`: standard deviation of what it leaves, dx and dy.
    `cells_um`, `quarters_um`: root mean square error at readings left out, whole cells at a time or a quarter of every
    cell at a time (NaN where that says nothing). `above`: how far its mean square at cells left out lies above the
    best, as a share of the best; `best_se`: the standard error of the best's mean square from cell to cell, as the same
    share. `f`, `f_p`: F test against the rung below with the same cell terms, NaN for the lowest. `aicc`: second-order
    Akaike criterion (Hurvich & Tsai 1989) less the smallest.
    """

    family: str
    shared: bool
    each: bool
    terms: float
    residual_um: tuple[float, float]
    cells_um: float
    quarters_um: float
    above: float
    best_se: float
    f: float
    f_p: float
    aicc: float

    @property
    def within_one(self) -> bool:
        """Whether it predicts cells as well as the best, up to one standard error (Breiman et al. 1984, sec. 3.4.3)."""
        return bool(self.above <= self.best_se)


@dataclass(frozen=True, slots=True)
class ModelChoice:
    """`ladders`: the rungs tried with each grid's terms, "" when the panel has no grid with enough cells. Recommended:
    `family` with the terms of the grids `shared` and `each`; `reason` in words, one sentence each. `blocks`: what was
    left out at a time."""

    ladders: dict[str, tuple[Rung, ...]]
    family: str
    shared: tuple[str, ...]
    each: tuple[str, ...]
    reason: tuple[str, ...]
    blocks: str

    @property
    def plain(self) -> tuple[Rung, ...]:
        """The rungs without cell terms, lowest first."""
        return tuple(rung for rung in next(iter(self.ladders.values())) if not rung.shared and not rung.each)


def panel_terms(family: str) -> tuple[str, ...]:
    """The panel terms of a rung."""
    return tuple(dict.fromkeys(name for part in LADDER[family] for name in FAMILIES[part]))


def shared_terms(with_each: bool) -> tuple[str, ...]:
    """The shared terms of a grid, with or without terms of each cell beside them."""
    return tuple(name for name in SHARED if not (with_each and name in EACH))


def model_of(family: str, layout: Layout, shared: tuple[str, ...] = (), each: tuple[str, ...] = ()) -> Model:
    """A rung's panel terms with the shared and the single cells' terms of the given grids; a term that each cell has is
    not shared too."""
    terms = [ModelTerm(name) for name in panel_terms(family)]
    terms += [ModelTerm(name, grid) for grid in shared for name in shared_terms(grid in each)]
    for grid in (layout.grid(name) for name in each):
        terms += [ModelTerm(name, grid.name, cell, grid.cell_label(cell)) for cell in range(grid.cells) for name in EACH]
    return Model(tuple(terms))


def choose_model(layout: Layout, readings: Readings, averages: Averages, sigma_um: tuple[float, float]) -> ModelChoice:
    """The smallest model that predicts left-out readings within one standard error of the best, and every model tried.

    `averages` without outliers; `sigma_um`: a first guess of the noise of dx and dy, which only weighs the two. Panel
    terms and shared terms are judged with whole cells (or blocks of the panel) left out; terms of single cells with a
    quarter of every cell left out, because nothing predicts the own terms of a cell that was never seen.
    """
    located = places(layout, readings.sites.xy_mm).cell
    grids = [name for name, cell in located.items() if len(np.unique(cell[cell >= 0])) >= LEAST_CELLS]
    patterns = averages.patterns()
    ladders: dict[str, tuple[Rung, ...]] = {}
    shared: list[str] = []
    each: list[str] = []
    family, reason = "", []
    for grid in grids or [""]:
        tried = _tried(layout, readings, patterns, np.asarray(sigma_um), grid)
        rungs = ladders[grid] = tuple(tried)
        whole = [rung for rung in rungs if not rung.each and family in ("", rung.family)]
        best = min(whole, key=lambda rung: rung.above)
        chosen = min((rung for rung in whole if rung.within_one), key=lambda rung: rung.terms)
        if not family:
            family = chosen.family
            reason.append(_why(whole, chosen, best, f"whole cells of {grid}" if grid else "blocks of the panel"))
        elif chosen.shared:
            reason.append(f"terms that all cells of {grid} share predict left-out cells better")
        shared += [grid] * chosen.shared
        same = [rung for rung in rungs if (rung.family, rung.shared) == (family, chosen.shared)]
        if grid and _own_terms(layout, readings, patterns, sigma_um, tried, same[0]):
            without, own = same
            each.append(grid)
            reason.append(f"terms of each cell of {grid} lower the error at left-out quarters of cells from "
                          f"{without.quarters_um:.3g} to {own.quarters_um:.3g} µm")
    blocks = f"whole cells of {grids[0]}" if grids else f"{BLOCKS} × {BLOCKS} blocks of the panel"
    return ModelChoice(ladders, family, tuple(shared), tuple(each), tuple(reason), blocks)


def _why(whole: list[Rung], chosen: Rung, best: Rung, blocks: str) -> str:
    name = f"{chosen.family} with shared cell terms" if chosen.shared else chosen.family
    if chosen is best:
        text = f"{name} predicts left-out {blocks} best ({best.cells_um:.3g} µm)"
    else:
        more = f"{best.family} with shared cell terms" if best.shared else best.family
        text = (f"{name} is the smallest model within one standard error of the best at left-out {blocks} "
                f"({chosen.cells_um:.3g} µm; {more}: {best.cells_um:.3g} µm)")
    below = [rung for rung in whole if rung.terms < chosen.terms and rung.shared == chosen.shared]
    if below:
        text += f"; {below[-1].family}{' with shared cell terms' if chosen.shared else ''} is worse ({below[-1].cells_um:.3g} µm)"
    return text


class _Tried(list[Rung]):
    """The rungs with one `grid`, and their squared errors at left-out quarters, cell by cell."""

    grid: str
    quarters: dict[tuple[str, bool, bool], Array]

    def gain(self, without: Rung) -> tuple[float, float]:
        """The share of the squared error at left-out quarters that single cells' terms take away, and its standard
        error."""
        before = self.quarters[(without.family, without.shared, False)]
        fall = before - self.quarters[(without.family, without.shared, True)]
        return float(fall.sum() / before.sum()), float(np.sqrt(len(fall)) * fall.std(ddof=1) / before.sum())


def _own_terms(layout: Layout, readings: Readings, patterns: list[Pattern], sigma_um: tuple[float, float], tried: _Tried,
               without: Rung) -> bool:
    """Whether terms of single cells predict left-out quarters better by more than one standard error from cell to cell,
    and there are steps between cells: smooth local distortion favours the terms of any cells, but steps only real ones
    make."""
    gain, error = tried.gain(without)
    if gain <= error:
        return False
    shared = (tried.grid,) if without.shared else ()
    excess, error = _steps(layout, readings, patterns, np.asarray(sigma_um), model_of(without.family, layout, shared), tried.grid)
    return excess > SURE * error


def _steps(layout: Layout, readings: Readings, patterns: list[Pattern], sigma: Array, model: Model,
           grid: str) -> tuple[float, float]:
    """How much more two close marks in neighbouring cells differ than two in one cell at the same distance: the mean
    excess of half the squared difference (in units of the noise), and its standard error from border to border.

    What marks of one cell do at a distance is a parabola in the distance.
    """
    at = places(layout, readings.sites.xy_mm)
    blocks, cell = design_blocks(model, at), at.cell[grid]
    pairs, distance, half = [], [], []
    for pattern in patterns:
        weight = sigma[pattern.axis]
        q = Factored.of(pattern.of(blocks) / weight[:, None]).q
        y = pattern.y / weight
        flat = np.full((len(y), 2 * len(pattern.site)), np.nan)
        flat[:, pattern.seen] = y - (y @ q) @ q.T
        residual = flat.reshape(len(y), -1, 2)
        near = cKDTree(at.xy_mm[pattern.site]).query_pairs(min(layout.grid(grid).cell_mm) / 2, output_type="ndarray")
        squares = (residual[:, near[:, 0]] - residual[:, near[:, 1]]) ** 2 / 2
        known = ~np.isnan(squares)
        count = known.sum(axis=(0, 2))
        some = np.flatnonzero(count)
        half.append(np.where(known, squares, 0.0).sum(axis=(0, 2))[some] / count[some])
        pairs.append(np.sort(cell[pattern.site[near[some]]], axis=1))
        ends = at.xy_mm[pattern.site[near[some]]]
        distance.append(np.linalg.norm(ends[:, 0] - ends[:, 1], axis=1))
    pair, d, h = np.concatenate(pairs), np.concatenate(distance), np.concatenate(half)
    inside = pair[:, 0] >= 0
    own, other = inside & (pair[:, 0] == pair[:, 1]), inside & (pair[:, 0] != pair[:, 1])
    if own.sum() < 10 or other.sum() < 10:
        return 0.0, np.inf
    curve = np.polynomial.Polynomial.fit(d[own], h[own], 2)
    other &= (d >= d[own].min() - 1e-6) & (d <= d[own].max() + 1e-6)
    _, border = np.unique(pair[other], axis=0, return_inverse=True)
    count = np.bincount(border.ravel())
    if len(count) < LEAST_CELLS:
        return 0.0, np.inf
    mean = np.bincount(border.ravel(), h[other] - curve(d[other])) / count
    return float(mean.mean()), float(mean.std(ddof=1) / np.sqrt(len(mean)))


@dataclass(frozen=True, slots=True)
class _Products:
    """Of one pattern: `zz` (cells, quarters, 2, d, d), `zy` (cells, quarters, 2, d, g), `yy` (cells, quarters, 2, g),
    `n` (cells, quarters, 2)."""

    zz: Array
    zy: Array
    yy: Array
    n: Array

    @classmethod
    def of(cls, z: Array, cell: Codes, quarter: Codes, pattern: Pattern, cells: int, sigma: Array) -> _Products:
        """Products of columns z (sites, 2, d) with cell and quarter of each site."""
        g, d = len(pattern.panels), z.shape[2]
        shape = (cells, QUARTERS + 1, 2)
        zz, zy, yy, n = np.zeros((*shape, d, d)), np.zeros((*shape, d, g)), np.zeros((*shape, g)), np.zeros(shape)
        label = cell[pattern.site] * (QUARTERS + 1) + quarter[pattern.site]
        order = np.argsort(label, kind="stable")
        for members in np.split(order, np.flatnonzero(np.diff(label[order])) + 1):
            at = divmod(int(label[members[0]]), QUARTERS + 1)
            for axis in (0, 1):
                rows = members[pattern.count[members, axis] > 0]
                columns = z[pattern.site[rows], axis] / sigma[axis]
                y = pattern.dxy_um[:, rows, axis] / sigma[axis]
                zz[at][axis] = columns.T @ columns
                zy[at][axis] = columns.T @ y.T
                yy[at][axis], n[at][axis] = (y**2).sum(axis=1), len(rows)
        return cls(zz, zy, yy, n)

    def errors(self, theta: Array) -> Array:
        """Squared errors (cells, quarters, 2, g) of terms (cells or 1, quarters or 1, d, g)."""
        theta = theta[:, :, None]
        return self.yy - 2 * (self.zy * theta).sum(axis=3) + (theta * (self.zz @ theta)).sum(axis=3)


def _solve(zz: Array, zy: Array, whole: Array) -> tuple[Array, NDArray[np.int64]]:
    """Least squares of (…, d, d) and (…, d, g), undetermined directions at zero: terms and rank. `whole` (d,): the
    diagonal that scales."""
    scale = np.sqrt(np.where(whole > 0, whole, 1.0))
    values, vectors = np.linalg.eigh(zz / (scale[:, None] * scale))
    known = values > RANK_TOLERANCE * np.maximum(values[..., -1:], 1e-300)
    known &= values > RANK_TOLERANCE
    inverse = np.where(known, 1.0 / np.where(known, values, 1.0), 0.0)
    moments = np.swapaxes(vectors, -1, -2) @ (zy / scale[:, None])
    return (vectors @ (inverse[..., None] * moments)) / scale[:, None], known.sum(axis=-1)


def _fit(zz: Array, zy: Array, panel: Codes, own: Codes) -> tuple[Array, Array, float]:
    """Terms from the products of each cell, (cells, d, d) and (cells, d, g): panel and shared terms (d, g) in place,
    own terms (cells, d, g) in place, and how many are determined."""
    d, g = zy.shape[1:]
    total, moment = zz.sum(axis=0), zy.sum(axis=0)
    theta, alone = np.zeros((d, g)), np.zeros((len(zz), d, g))
    whole = np.diagonal(total)
    rank = 0.0
    if not len(own):
        theta[panel], found = _solve(total[np.ix_(panel, panel)], moment[panel], whole[panel])
        return theta, alone, float(found)
    # Terms of single cells drop out cell by cell (Schur complement); what is left is a panel's problem of its usual size.
    cross, square = zz[:, panel][:, :, own], zz[:, own][:, :, own]
    right = np.concatenate([np.swapaxes(cross, 1, 2), zy[:, own]], axis=2)
    solved, found = _solve(square, right, whole[own] / max(len(zz), 1))
    rank += float(found.sum())
    through, direct = solved[:, :, :len(panel)], solved[:, :, len(panel):]
    reduced = total[np.ix_(panel, panel)] - (cross @ through).sum(axis=0)
    theta[panel], found = _solve(reduced, moment[panel] - (cross @ direct).sum(axis=0), whole[panel])
    alone[:, own] = direct - through @ theta[panel]
    return theta, alone, rank + float(found)


def _tried(layout: Layout, readings: Readings, patterns: list[Pattern], sigma: Array, grid: str) -> _Tried:
    """Every rung with and without the shared and single cells' terms of one grid ("" for none)."""
    names = list(dict.fromkeys(name for family in LADDER for name in panel_terms(family)))
    terms = [ModelTerm(name) for name in names]
    if grid:
        terms += [ModelTerm(name, grid) for name in (*SHARED, *EACH)]
    at = places(layout, readings.sites.xy_mm)
    z = design_blocks(Model(tuple(terms)), at)
    own = np.arange(len(names) + len(SHARED), len(terms))
    cell, quarter, cells = _cells(layout, at.xy_mm, at.cell.get(grid), at.local_mm.get(grid))
    variants = [(False, False)] + ([(True, False), (False, True), (True, True)] if grid else [])
    keys = [(family, shared, each) for shared, each in variants for family in LADDER]
    left = {key: np.zeros((cells, 2)) for key in keys}  # squared errors at left-out cells, quarters
    squares = {key: np.zeros(2) for key in keys}
    rank = dict.fromkeys(keys, 0.0)
    n, panels = np.zeros((cells, 2)), 0
    for pattern in patterns:
        products = _Products.of(z, cell, quarter, pattern, cells, sigma)
        panels += len(pattern.panels)
        n += len(pattern.panels) * products.n.sum(axis=1)
        zz, zy = products.zz.sum(axis=2), products.zy.sum(axis=2)
        for key in keys:
            family, shared, each = key
            columns = np.array([names.index(name) for name in panel_terms(family)]
                               + (list(range(len(names), len(names) + len(SHARED))) if shared else []))
            alone = own if each else own[:0]
            theta, single, found = _fit(zz.sum(axis=1), zy.sum(axis=1), columns, alone)
            squares[key] += products.errors((theta + single)[:, None]).sum(axis=(0, 1, 3))
            rank[key] += found * len(pattern.panels)
            if not each:
                left[key][:, 0] += _left_cells(products, zz.sum(axis=1), zy.sum(axis=1), columns)
            if grid:
                left[key][:, 1] += _left_quarters(products, zz, zy, columns, alone)
    tried = _rungs(keys, left, squares, rank, n, panels, sigma)
    tried.grid = grid
    return tried


def _left_cells(products: _Products, zz: Array, zy: Array, columns: Codes) -> Array:
    """Squared errors of each cell under terms fitted without it, (cells,)."""
    rest_zz, rest_zy = zz.sum(axis=0) - zz, zy.sum(axis=0) - zy
    theta = np.zeros_like(zy)
    whole = np.diagonal(zz.sum(axis=0))[columns]
    theta[:, columns], _ = _solve(rest_zz[:, columns][:, :, columns], rest_zy[:, columns], whole)
    return products.errors(theta[:, None]).sum(axis=(1, 2, 3))


def _left_quarters(products: _Products, zz: Array, zy: Array, columns: Codes, own: Codes) -> Array:
    """Squared errors of each cell when one of its quarters, and that of every other cell, is left out at a time,
    (cells,)."""
    total = np.zeros(len(zz))
    for quarter in range(QUARTERS):
        theta, single, _ = _fit(zz.sum(axis=1) - zz[:, quarter], zy.sum(axis=1) - zy[:, quarter], columns, own)
        total += products.errors((theta + single)[:, None])[:, quarter].sum(axis=(1, 2))
    return total


def _rungs(keys: list[Key], left: dict[Key, Array], squares: dict[Key, Array], rank: dict[Key, float], n: Array, panels: int,
           sigma: Array) -> _Tried:
    readings = n.sum()
    unit = float(np.sqrt((sigma**2).mean()))
    used = n.sum(axis=1) > 0
    whole = [key for key in keys if not key[2]]
    best = min(whole, key=lambda key: left[key][:, 0].sum())
    least = left[best][:, 0]
    criterion = {}
    for key in keys:
        k = rank[key] + 1
        rest = readings - k - 1
        deviance = readings * np.log(max(squares[key].sum(), 1e-300) / readings)
        criterion[key] = deviance + 2 * k * readings / rest if rest > 0 else np.inf
    floor = min(criterion.values())
    best_se = float(np.sqrt(used.sum()) * least[used].std(ddof=1) / max(least.sum(), 1e-300)) if used.sum() > 1 else np.inf
    tried = _Tried()
    tried.quarters = {key: left[key][used, 1] for key in keys}
    for key in keys:
        family, shared, each = key
        dof = readings - rank[key]
        share = n.sum(axis=0) / readings
        residual = sigma * np.sqrt(np.divide(squares[key], dof * share, out=np.full(2, np.nan), where=dof * share > 0))
        order = list(LADDER).index(family)
        f = f_p = np.nan
        if order and dof > 0:
            below = (list(LADDER)[order - 1], shared, each)
            more = rank[key] - rank[below]
            if more > 0:
                f = float((squares[below].sum() - squares[key].sum()) / more / (squares[key].sum() / dof))
                f_p = float(fdtrc(more, dof, max(f, 0.0)))
        excess = (left[key][:, 0] - least)[used]
        error = np.sqrt(left[key].sum(axis=0) / [readings, max(n[:-1].sum(), 1.0)]) * unit
        tried.append(Rung(family, shared, each, rank[key] / max(panels, 1), (float(residual[0]), float(residual[1])),
                          np.nan if each else float(error[0]), float(error[1]) if tried.quarters[key].any() else np.nan,
                          np.inf if each else float(excess.sum() / max(least.sum(), 1e-300)), best_se, f, f_p,
                          float(criterion[key] - floor)))
    return tried


def _cells(layout: Layout, xy_mm: Array, cell: Codes | None, local_mm: Array | None) -> tuple[Codes, Codes, int]:
    """The cell and the quarter of a cell of each place, (n,) each, and the number of cells. Places outside all cells
    are one more cell, and in a fifth quarter that is never left out: nothing but them tells single cells' terms from
    the panel's."""
    if cell is None or local_mm is None:
        low, span = xy_mm.min(axis=0), np.maximum(np.ptp(xy_mm, axis=0), 1e-9)
        step = np.minimum((BLOCKS * (xy_mm - low) / span).astype(np.int64), BLOCKS - 1)
        return step[:, 1] * BLOCKS + step[:, 0], np.zeros(len(xy_mm), np.int64), BLOCKS**2
    count = int(cell.max()) + 1
    quarter = (local_mm[:, 0] > 0) + 2 * (local_mm[:, 1] > 0)
    return np.where(cell >= 0, cell, count), np.where(cell >= 0, quarter, QUARTERS), count + 1
