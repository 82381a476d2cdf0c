"""The direct way to parameters: model atmospheres and line formation inside the loop, no grid.

It takes the place of the grid's interpolator in a `Problem`, so that the same balance and the same Newton iteration run
on it. The atmosphere keeps its metallicity (opacity tables of another one take a minute), its derivatives are
differences.
"""

from __future__ import annotations

import numpy as np

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.structure import solve_structure
from specsolve.constants import SOLAR_IRON
from specsolve.formation.equivalent_width import reduced_widths
from specsolve.grid import LineAbundances
from specsolve.grid.inversion import invert_curves, values_on_curves
from specsolve.grid.stencil import spline_slopes
from specsolve.lines import LineList
from specsolve.matter.composition import composition_for

STEPS = np.array([20.0, 0.02, 0.0, 0.02])  # K, dex, -, km/s


class DirectWay:
    """Line abundances and widths by the full engine at any theta; `atmospheres` counts what was converged."""

    def __init__(self, lines: LineList, mh: float, start):
        self.lines, self.mh, self.start = lines, mh, start
        self.composition, self.blanketing = composition_for(mh), load_blanketing(mh)
        self.dA = np.array([-0.6, -0.3, 0.0, 0.3, 0.6])
        self.slopes = spline_slopes(self.dA)
        self.atmospheres = 0
        self._known: dict[tuple[float, float], object] = {}

    def model(self, teff: float, logg: float):
        """Converge an atmosphere, warm from the latest one."""
        key = (float(teff), float(logg))
        if key not in self._known:
            model = solve_structure(teff, logg, self.composition, self.blanketing, start=self.start)
            assert model.status == "converged", model.reason
            self._known[key] = self.start = model
            self.atmospheres += 1
        return self._known[key]

    def curves(self, theta) -> np.ndarray:
        """Curves of growth, shape (n_lines, n_dA); abundances are relative to SOLAR_IRON + the atmosphere's mh."""
        model = self.model(theta[0], theta[1])
        return reduced_widths(model, self.composition, self.lines, theta[3:4], SOLAR_IRON + self.mh + self.dA)[:, 0]

    def abundances(self, theta, log_reduced_widths) -> LineAbundances:
        """As `Interpolator.abundances`."""
        here = self.curves(theta)
        derivatives = np.zeros((4, *here.shape))
        for axis in (0, 1, 3):
            there = np.array(theta, dtype=float)
            there[axis] += STEPS[axis]
            derivatives[axis] = (self.curves(there) - here) / STEPS[axis]
        dA, d_theta, d_width, flags = invert_curves(here, derivatives, self.dA, self.slopes, log_reduced_widths)
        return LineAbundances(abundance=SOLAR_IRON + self.mh + dA, d_theta=d_theta, d_width=d_width, flags=flags)

    def widths(self, theta, abundance) -> np.ndarray:
        """As `Interpolator.widths`."""
        dA = np.broadcast_to(np.asarray(abundance, float) - SOLAR_IRON - self.mh, len(self.lines))
        return values_on_curves(self.curves(theta), self.dA, self.slopes, dA)
