"""What is assumed of a panel: the corrected terms, and beside them what may be there without being corrected.

All of it is one linear model with a prior: θ = corrected terms | potential terms | local field in dx | local field in dy |
errors shared by readings (of one side, or after turning the panel over). A term without prior has infinite standard
deviation; every prior is a visible row here, there is no other ridge.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.model.basis import Model, Places, design_blocks
from sampler.panel.layout import Sites
from sampler.uncertainty.field import LocalField
from sampler.uncertainty.noise import Noise

Array = NDArray[np.float64]

NO_TERMS = Model(())


@dataclass(frozen=True, slots=True)
class SharedErrors:
    """Offsets common to many readings, one of dx and one of dy for each label: `sides[label]` are the sides it is on."""

    sides: tuple[tuple[str, ...], ...]
    sd_um: tuple[tuple[float, float], ...]

    def columns(self, side: NDArray[np.str_]) -> Array:
        """Their part in each reading, (n, 2, 2·labels)."""
        columns = np.zeros((len(side), 2, 2 * len(self.sides)))
        for number, sides in enumerate(self.sides):
            on = np.isin(side, sides)
            columns[on, 0, 2 * number] = columns[on, 1, 2 * number + 1] = 1.0
        return columns


NOT_SHARED = SharedErrors((), ())


@dataclass(frozen=True, slots=True)
class Assumed:
    """`model` is corrected; `sd` (p,) its terms' prior standard deviations in their units, inf for none.

    `potential` (DuMouchel & Jones 1994): terms not corrected but perhaps present, with `potential_sd` (k,). `field`: local
    correlated distortion.
    """

    model: Model
    sd: Array
    potential: Model = NO_TERMS
    potential_sd: Array | None = None
    field: LocalField | None = None
    shared: SharedErrors = NOT_SHARED

    @classmethod
    def plain(cls, model: Model) -> Assumed:
        """Nothing beside the corrected terms, and no prior."""
        return cls(model, np.full(len(model), np.inf))

    @property
    def corrected(self) -> int:
        return len(self.model)

    @property
    def size(self) -> int:
        return self.corrected + len(self.potential) + (2 * self.field.rank if self.field else 0) + 2 * len(self.shared.sides)

    @property
    def interest(self) -> NDArray[np.bool_]:
        """Which of θ are corrected terms, (size,)."""
        return np.arange(self.size) < self.corrected

    @property
    def prior_precision(self) -> Array:
        """P₀ (size, size)."""
        sd = [self.sd]
        if len(self.potential):
            assert self.potential_sd is not None
            sd.append(self.potential_sd)
        if self.field:
            sd.append(np.ones(2 * self.field.rank))
        sd += [np.array(pair) for pair in self.shared.sd_um]
        return np.diag(1.0 / np.concatenate(sd) ** 2)

    def readings(self, at: Places, side: NDArray[np.str_]) -> Array:
        """What reading a mark at each point gives per unit of each of θ, (n, 2, size); `side` (n,) of each mark."""
        parts = self._displacement(at)
        if self.shared.sides:
            parts.append(self.shared.columns(side))
        return parts[0] if len(parts) == 1 else np.concatenate(parts, axis=2)

    def position(self, at: Places, of: str) -> Array:
        """Directions of a predicted position at points, (n, 2, size).

        `of` "correction": what the corrected terms say; "displacement": all that moves the panel, the field included.
        Errors shared by readings move nothing.
        """
        parts = self._displacement(at) if of == "displacement" else [design_blocks(self.model, at)]
        rest = self.size - sum(part.shape[2] for part in parts)
        if rest:
            parts.append(np.zeros((len(at), 2, rest)))
        return parts[0] if len(parts) == 1 else np.concatenate(parts, axis=2)

    def _displacement(self, at: Places) -> list[Array]:
        parts = [design_blocks(self.model, at)]
        if len(self.potential):
            parts.append(design_blocks(self.potential, at))
        if self.field:
            basis = self.field.basis(at.xy_mm)
            nothing = np.zeros_like(basis)
            parts += [np.stack([basis * self.field.sigma_um[0], nothing], axis=1),
                      np.stack([nothing, basis * self.field.sigma_um[1]], axis=1)]
        return parts

    def fixed_um(self, xy_mm: Array, of: str) -> Array:
        """Standard uncertainty of a predicted position that no reading lowers, (n, 2): what the field's cut leaves out."""
        if of != "displacement" or self.field is None:
            return np.zeros((len(xy_mm), 2))
        return np.sqrt(self.field.neglected(xy_mm))[:, None] * np.asarray(self.field.sigma_um)

    def bias(self, whitened: Array) -> Array:
        """What the potential terms would put on each corrected term if they were ignored in the fit, (p,): one sd.

        The alias matrix (X₁ᵀX₁)⁻¹X₁ᵀX₂ of the chosen readings (Box & Draper 1959), summed in quadrature over the
        independent potential terms. Zero without potential terms; priors of corrected terms take part in the fit.
        """
        if not len(self.potential):
            return np.zeros(self.corrected)
        assert self.potential_sd is not None
        rows = whitened.reshape(-1, self.size)
        fitted, ignored = rows[:, :self.corrected], rows[:, self.corrected:self.corrected + len(self.potential)]
        normal = fitted.T @ fitted + np.diag(1.0 / self.sd**2)
        alias = np.linalg.pinv(normal, hermitian=True) @ (fitted.T @ ignored)
        return np.sqrt(((alias * self.potential_sd) ** 2).sum(axis=1))

    def sigma_um(self, noise: Noise, sites: Sites) -> Array:
        """Standard uncertainty of each reading, (n, 2): noise, and the share of the field that its directions leave out."""
        return np.hypot(noise.sigma_um(sites), self.fixed_um(sites.xy_mm, "displacement"))
