"""What one reading is worth: standard uncertainties per mark and axis."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.panel.layout import Sites


@dataclass(frozen=True, slots=True)
class Noise:
    """`mark_um`: reading one mark once, dx and dy. `local_um`: displacement at a mark that no model term explains.

    With `local_range_mm` the local part is a smooth field (`LocalField`), not noise of the single mark.
    """

    mark_um: tuple[float, float]
    local_um: tuple[float, float] = (0.0, 0.0)
    local_range_mm: float | None = None

    def sigma_um(self, sites: Sites) -> NDArray[np.float64]:
        """Standard uncertainty of each reading as data for the model, (n, 2): reading and local parts in quadrature.

        A mark's own reading sigma, where it has one, replaces `mark_um`. A local part that is a field is not in it.
        """
        reading = np.where(np.isnan(sites.sigma_um), np.asarray(self.mark_um), sites.sigma_um)
        return reading if self.local_range_mm else np.hypot(reading, np.asarray(self.local_um))
