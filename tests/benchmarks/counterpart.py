"""The same store in the hands of general tools: scipy's RegularGridInterpolator inside scipy's least_squares.

Free are teff, logg, [Fe/H] of star and atmosphere, and vmic; the differences are predicted minus measured log widths over
their errors, the Jacobian is by differences. Linear in every axis: the cubic of that tool builds a spline over the whole
five-dimensional grid for every line.
"""

from __future__ import annotations

import numpy as np
from scipy.interpolate import RegularGridInterpolator
from scipy.optimize import least_squares

from specsolve.balance.problem import Problem
from specsolve.balance.steps import STEP_UNIT
from specsolve.grid.codes import decode

SCALE = np.asarray(STEP_UNIT)
GF_ERROR = 0.05  # dex
FAR = 1e3


class Counterpart:
    """Predicted widths of a problem's lines from the decoded store; making it is not part of a solve."""

    def __init__(self, problem: Problem):
        grid, self.lines = problem.grid, problem.line_indices
        nodes = tuple(index.ravel() for index in np.indices(grid.node_shape))
        codes = grid.gather(problem.treatment, nodes, self.lines)  # (node, line, vmic, dA)
        widths = decode(np.moveaxis(codes, 1, -1)).reshape(*grid.node_shape, *codes.shape[2:], self.lines.size)
        self.axes = [axis.values for axis in (*grid.node_axes, *grid.line_axes)]
        self.table = RegularGridInterpolator(self.axes, widths, bounds_error=False)
        self.measured = problem.inputs.log_reduced_width
        self.sigma = np.hypot(problem.inputs.sigma_logw, GF_ERROR)
        self.evaluations = 0

    def differences(self, x: np.ndarray) -> np.ndarray:
        """(predicted - measured) / error, shape (n_lines,)."""
        self.evaluations += 1
        point = np.append(x * SCALE, 0.0)  # no abundance beyond that of the atmosphere
        out = (self.table(point)[0] - self.measured) / self.sigma
        return np.where(np.isfinite(out), out, FAR)

    def solve(self, start: np.ndarray) -> np.ndarray:
        """teff, logg, mh, vmic at the least squares."""
        return least_squares(self.differences, start / SCALE, xtol=1e-8).x * SCALE
