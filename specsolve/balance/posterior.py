"""Density of the parameters given the measured widths, around one candidate.

What ranks the candidates (`Problem.log_likelihood`) weighs every line anew at every point and asks only that the lines
agree with each other. Here the robust weights w are those of the candidate, kept, so that the density is smooth, and the
lines must agree with the atmosphere's [Fe/H] too:

    -2 ln L(theta | s) = sum_i [ w_i (y_i - X_i b)^2 / v_i + ln v_i - 2 ln |dA_i / dlnW_i| ],   y_i = A_i - zero point - mh

with v_i of `specsolve.balance.strength`. A_i is the abundance of the measured width along the tangent to the curve of growth
at the line's place on the strength axis, not at the measured width itself: noise of a saturated line would else bias vmic
(the effect of Magain 1984, A&A 134, 189, in second order).

A parameter that is fixed takes its residual out of the balance; here it gives a column of X whose factor b is fitted at every
point: excitation (teff), Fe II alone (logg), all lines (feh), strength (vmic). The line-to-line term s is not known, only
estimated: the density is the mean over equally probable values of s. Outside knowledge enters as its Gaussian.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import gammaincinv, logsumexp

from specsolve.errors import OutOfGridError

from .likelihood import LN10
from .minima import FoundMinimum
from .problem import Problem
from .strength import LineVariances, strength_axis
from .uncertainty import scatter_freedom

SCATTER_NODES = 5  # equally probable values of the line-to-line term


@dataclass(frozen=True, eq=False)
class Posterior:
    """Density around one candidate.

    Attributes
    ----------
    problem : Problem
    item : FoundMinimum

    Examples
    --------
    >>> density = Posterior(problem, ranking.found[0])                          # doctest: +SKIP
    >>> density.log_density(solution.parameters)                                # doctest: +SKIP
    0.0
    """

    problem: Problem
    item: FoundMinimum

    @cached_property
    def used(self) -> np.ndarray:
        """Places of the lines that carry weight at the candidate."""
        state = self.item.minimum.state
        return np.flatnonzero(state.used & (state.weighting.robust > 0.0))

    @cached_property
    def nuisance(self) -> np.ndarray:
        """X, shape (n_used, n_removed): what the removed residuals leave free."""
        inputs, weighting, fixed = self.problem.inputs, self.item.minimum.state.weighting, self.problem.fixed
        fe1 = ~inputs.is_fe2[self.used]
        columns = []
        for name, values in (("teff", inputs.excitation_potential), ("vmic", weighting.strength)):
            if name in fixed and fe1.any():  # slopes are about the mean of Fe I
                columns.append(np.where(fe1, values[self.used] - values[self.used][fe1].mean(), 0.0))
        if "logg" in fixed:
            columns.append((~fe1).astype(float))
        if "feh" in fixed:
            columns.append(np.ones(fe1.size))
        columns = [column for column in columns if np.any(column != 0.0)]
        return np.column_stack(columns) if columns else np.zeros((fe1.size, 0))

    @cached_property
    def scatter_squared(self) -> np.ndarray:
        """Values of s^2 of each used line, shape (n_nodes, n_used) [dex^2]: s^2 nu / chi2_nu at equal probabilities."""
        state = self.item.minimum.state
        estimate = state.weighting.scatter[self.problem.inputs.place][self.used] ** 2
        if not estimate.any():
            return estimate[None, :]
        freedom = np.maximum(scatter_freedom(self.problem, state), 1.0)
        middle = (np.arange(SCATTER_NODES) + 0.5) / SCATTER_NODES
        of_ion = np.array([nu / (2.0 * gammaincinv(0.5 * nu, middle)) for nu in freedom])
        return of_ion.T[:, self.problem.inputs.place[self.used]] * estimate

    def log_density(self, theta: np.ndarray) -> float:
        """ln of the density at theta, 0 at the candidate but for Outside terms.

        It is -inf outside the grid, and where a used line has no abundance in the table.

        Parameters
        ----------
        theta : ndarray, shape (4,)
            teff, logg, feh, vmic; fixed parameters at their values.
        """
        low, high = self.problem.bounds
        if not ((theta >= low) & (theta <= high)).all():
            return float("-inf")
        lines = self.tangent_lines(theta)
        if lines is None:
            return float("-inf")
        reference, log_volume = self._at_candidate
        terms, _ = self.problem.outside_terms(theta)
        values = self._minus_two_log(lines)
        inside = logsumexp(-0.5 * (values - reference) - log_volume) - logsumexp(-log_volume)
        return float(inside - 0.5 * terms @ terms)

    def tangent_lines(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray] | None:
        """y, dA/dlog10 W and dA/dtheta of the used lines, along tangents at the strength axis; None without a value."""
        problem, used, inputs = self.problem, self.used, self.problem.inputs
        weighting = self.item.minimum.state.weighting
        try:
            abundance, _, d_width, _ = problem.line_abundances(theta)
        except OutOfGridError:
            return None
        y, slope = (abundance - inputs.zero_point)[used] - theta[2], d_width[used]
        if not (np.isfinite(y).all() and np.isfinite(slope).all()):
            return None
        variances = LineVariances(
            width=(slope * inputs.sigma_logw[used]) ** 2,
            gf=(inputs.known_sigma_gf**2 + inputs.zero_point_variance)[used],
            scatter=weighting.scatter[inputs.place][used] ** 2,
        )
        deviation = without(self.nuisance, y, weighting.robust[used] / variances.total)
        expected = abundance.copy()
        expected[used] -= deviation
        predicted = problem.interpolator.widths(theta, expected + problem.log_gf_shift)[used]
        measured = inputs.log_reduced_width
        place = measured.copy()
        place[used] = strength_axis(measured[used], predicted, variances, inputs.sigma_gf[used], inputs.differential)
        if not np.isfinite(place[used]).all():
            return None
        found = problem.interpolator.abundances(theta, place)
        slope = found.d_width[used]
        along = (found.abundance - problem.log_gf_shift - abundance)[used] + slope * (measured - place)[used]
        if not (np.isfinite(along).all() and np.isfinite(slope).all()):
            return None
        return y + along, slope, found.d_theta[used]

    @cached_property
    def _at_candidate(self) -> tuple[np.ndarray, np.ndarray]:
        """-2 ln L and ln of the volume of each value of s at the candidate."""
        theta, free = self.item.minimum.theta, self.problem.free
        lines = self.tangent_lines(theta)
        if lines is None:
            return np.zeros(len(self.scatter_squared)), np.zeros(len(self.scatter_squared))
        _, outside = self.problem.outside_terms(theta)
        lam = outside[:, free].T @ outside[:, free]
        design = lines[2][:, free].copy()
        design[:, free == 2] -= 1.0
        volumes = []
        for s_squared in self.scatter_squared:
            weight = self._weight(lines[1], s_squared)
            columns = without(self.nuisance, design, weight)
            volumes.append(-0.5 * np.linalg.slogdet((columns * weight[:, None]).T @ columns + lam)[1])
        return self._minus_two_log(lines), np.array(volumes)

    def _weight(self, slope: np.ndarray, s_squared: np.ndarray) -> np.ndarray:
        inputs, used = self.problem.inputs, self.used
        known = inputs.known_sigma_gf[used] ** 2 + inputs.zero_point_variance[used]
        variance = (slope * inputs.sigma_logw[used]) ** 2 + known + s_squared
        return self.item.minimum.state.weighting.robust[used] / variance

    def _minus_two_log(self, lines: tuple[np.ndarray, np.ndarray, np.ndarray]) -> np.ndarray:
        """-2 ln L for each value of s, shape (n_nodes,)."""
        y, slope, _ = lines
        constant = -2.0 * float(np.log(np.abs(slope) / LN10).sum())
        values = []
        for s_squared in self.scatter_squared:
            weight = self._weight(slope, s_squared)
            values.append(weight @ without(self.nuisance, y, weight) ** 2 - np.log(weight).sum() + constant)
        return np.array(values)


def without(nuisance: np.ndarray, y: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """y, shape (n,) or (n, m), less what the nuisance columns (n, k) can take of it by weighted least squares.

    Examples
    --------
    >>> without(np.ones((3, 1)), np.array([1.0, 2.0, 3.0]), np.ones(3)).round(12).tolist()
    [-1.0, 0.0, 1.0]
    """
    if nuisance.shape[1] == 0:
        return y
    root = np.sqrt(weight)
    scaled = y * (root if y.ndim == 1 else root[:, None])
    factor, *_ = np.linalg.lstsq(nuisance * root[:, None], scaled, rcond=None)
    return y - nuisance @ factor
