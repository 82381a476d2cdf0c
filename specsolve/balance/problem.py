"""`Problem`: one star, one grid, one treatment and what is known from elsewhere, with the pure functions of the
balance.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Protocol

import numpy as np

from .likelihood import minus_two_log_density
from .options import Options
from .outside import Outside, fixed_parameters, whitened_terms
from .solution import PARAMETER_NAMES
from .star import Match, Star, match_lines
from .state import BalanceState, LineInputs, balance_state
from .strength import sigma_log_width
from .zero_points import ZeroPoints

IONS = ("Fe I", "Fe II")
GRID_AXES = ("teff", "logg", "mh", "vmic")
REASON_EXCITATION = "excitation_cut"
REASON_WAVELENGTH = "wavelength_cut"
REASON_GRADE = "grade_cut"
REASON_NO_ZERO_POINT = "not_in_reference_star"
REASON_ION = "other_ion"
WORST_GRADE_ABSOLUTE, WORST_GRADE_DIFFERENTIAL = 3, 4
SAME_LOG_GF_DEX = 0.005  # a given log gf this close to the list's is the list's, rounded


class WidthInterpolator(Protocol):
    """What the balance asks of a grid: line abundances from widths, and widths from abundances."""

    def abundances(self, theta: np.ndarray, log_reduced_widths: np.ndarray) -> Any:
        """Object with abundance, d_theta, d_width, flags."""

    def widths(self, theta: np.ndarray, abundance: np.ndarray) -> np.ndarray:
        """log10(W/lambda) of each line."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Problem:
    """One solve, as data. Change anything with `replace` and solve again.

    Attributes
    ----------
    star : Star
    grid : ResponseGrid
    treatment : str
    outside : tuple of Outside
    zero_points : ZeroPoints
    pair : (str, str)
        The two ions of the ionization balance.
    options : Options
    dropped : mapping of int to str
        Rows of the star that are left out beforehand, with the reason.
    compiled : bool
        Use the compiled kernels: faster for many stars, equal to 1e-9.
    """

    star: Star
    grid: Any
    treatment: str = "lte"
    outside: tuple[Outside, ...] = ()
    zero_points: ZeroPoints = field(default_factory=ZeroPoints.solar)
    pair: tuple[str, str] = IONS
    options: Options = field(default_factory=Options)
    dropped: dict[int, str] = field(default_factory=dict)
    compiled: bool = False

    def replace(self, **changes: Any) -> Problem:
        """The same problem with some fields changed."""
        return dataclasses.replace(self, **changes)

    @cached_property
    def fixed(self) -> dict[str, float]:
        """Name to value of the fixed parameters."""
        return fixed_parameters(self.outside)

    @cached_property
    def free(self) -> np.ndarray:
        """Places of the free parameters in theta."""
        return np.array([i for i, name in enumerate(PARAMETER_NAMES) if name not in self.fixed], dtype=np.int64)

    @cached_property
    def bounds(self) -> tuple[np.ndarray, np.ndarray]:
        """Lowest and highest theta of the grid, shape (4,) each."""
        axes = [np.asarray(self.grid.axes[name], float) for name in GRID_AXES]
        return np.array([a.min() for a in axes]), np.array([a.max() for a in axes])

    @cached_property
    def match(self) -> Match:
        """The star's lines in the grid's list."""
        return match_lines(self.star, self.grid.lines)

    @cached_property
    def reasons(self) -> np.ndarray:
        """Why each line of the star cannot take part whatever the parameters are; empty if it can. Shape
        (n_star_lines,).
        """
        reason = self.match.reason.copy()
        lines, options = self.grid.lines, self.options
        found = self.match.index >= 0
        place = np.where(found, self.match.index, 0)

        def mark(condition, text):
            reason[(reason == "") & condition] = text

        mark(~np.isin(self.star.ion, self.pair), REASON_ION)
        energy, wavelength = lines.excitation_potential[place], lines.wavelength_air[place]
        low, high = options.excitation_range
        mark(found & ((energy < low) | (energy > high)), REASON_EXCITATION)
        low, high = options.wavelength_range
        mark(found & ((wavelength < low) | (wavelength > high)), REASON_WAVELENGTH)
        worst = options.worst_grade
        if worst is None:
            worst = WORST_GRADE_DIFFERENTIAL if self.zero_points.differential else WORST_GRADE_ABSOLUTE
        mark(found & np.isnan(self.star.log_gf) & (lines.grade[place] > worst), REASON_GRADE)
        for row, text in self.dropped.items():
            if reason[row] == "":
                reason[row] = text
        zero, _ = self.zero_points.for_lines(lines.key[place])
        mark(found & np.isnan(zero), REASON_NO_ZERO_POINT)
        return reason

    @cached_property
    def rows(self) -> np.ndarray:
        """Rows of the star that can take part, in canonical order."""
        return np.flatnonzero(self.reasons == "")

    @cached_property
    def line_indices(self) -> np.ndarray:
        """Positions of these lines in the grid's list."""
        return self.match.index[self.rows]

    @cached_property
    def keys(self) -> np.ndarray:
        """Keys of these lines."""
        return self.grid.lines.key[self.line_indices]

    @cached_property
    def list_log_gf(self) -> np.ndarray:
        """log gf of the grid's list on the Fe II scale asked for."""
        lines, place = self.grid.lines, self.line_indices
        values = lines.log_gf[place]
        if self.options.fe2_scale == "alternative":
            other = lines.log_gf_alternative[place]
            values = np.where((lines.ion[place] == self.pair[1]) & np.isfinite(other), other, values)
        return values

    @cached_property
    def log_gf(self) -> np.ndarray:
        """log gf in use: the star table's where given, else the list's."""
        given = self.star.log_gf[self.rows]
        return np.where(np.isnan(given), self.list_log_gf, given)

    @cached_property
    def log_gf_error(self) -> np.ndarray:
        """Its error [dex]: the star table's; the list's where the list's own log gf is in use; nan = unknown."""
        given, error = self.star.log_gf[self.rows], self.star.log_gf_error[self.rows]
        own = self.grid.lines.log_gf_error[self.line_indices]
        same = np.isnan(given) | (np.abs(given - self.grid.lines.log_gf[self.line_indices]) < SAME_LOG_GF_DEX)
        return np.where(np.isnan(error) & same, own, error)

    @cached_property
    def log_gf_shift(self) -> np.ndarray:
        """log gf in use minus that of the grid [dex]; abundances move by its negative."""
        return self.log_gf - self.grid.lines.log_gf[self.line_indices]

    @cached_property
    def inputs(self) -> LineInputs:
        """Constant inputs of the balance."""
        star, rows = self.star, self.rows
        wavelength_ma = self.grid.lines.wavelength_air[self.line_indices] * 1e3  # 1 Angstrom = 1000 mA
        zero, covariance = self.zero_points.for_lines(self.keys)
        differential = self.zero_points.differential
        if differential:  # the reference star's lines are kept on the list's log gf
            zero = zero - self.log_gf_shift
        return LineInputs(
            is_fe2=star.ion[rows] == self.pair[1],
            excitation_potential=self.grid.lines.excitation_potential[self.line_indices],
            log_reduced_width=np.log10(star.equivalent_width[rows] / wavelength_ma),
            sigma_logw=sigma_log_width(star.equivalent_width[rows], star.equivalent_width_error[rows]),
            sigma_gf=np.zeros(rows.size) if differential else self.log_gf_error,
            zero_point=zero,
            zero_point_covariance=covariance,
            differential=differential,
            zero_point_noise=self.zero_points.noise_for(self.keys),
        )

    @cached_property
    def interpolator(self) -> WidthInterpolator:
        """Of the grid, for these lines."""
        from specsolve.grid.interpolate import Interpolator

        return Interpolator(self.grid, self.treatment, self.line_indices, compiled=self.compiled)

    @cached_property
    def active(self) -> np.ndarray:
        """Residuals that a free parameter answers for; bool, shape (4,)."""
        mask = np.zeros(4, dtype=bool)
        mask[self.free] = True
        return mask

    def line_abundances(self, theta: np.ndarray) -> Any:
        """Line abundances at theta on the log gf in use."""
        found = self.interpolator.abundances(theta, self.inputs.log_reduced_width)
        return found.abundance - self.log_gf_shift, found.d_theta, found.d_width, found.flags

    def predicted_widths(self, theta: np.ndarray, common: np.ndarray) -> np.ndarray:
        """Predicted log10(W/lambda) when each ion has a common relative abundance; `common` has shape (2,)."""
        inputs = self.inputs
        abundance = common[inputs.place] + inputs.zero_point + self.log_gf_shift
        return self.interpolator.widths(theta, abundance)

    def balance(
        self,
        theta: np.ndarray,
        allowed: np.ndarray | None = None,
        previous: BalanceState | None = None,
        rough: bool = False,
    ) -> BalanceState:
        """The balance at theta.

        Parameters
        ----------
        theta : ndarray, shape (4,)
        allowed : ndarray of bool, shape (n_lines,), optional
            Lines that may be used; all by default.
        previous : BalanceState, optional
            Start of the weights; changes the speed, not the result.
        rough : bool
            Predict widths to first order from the measured ones, which spares a look at the grid: for the way to a
            minimum, not for its end.

        Raises
        ------
        OutOfGridError
            If theta lies outside the grid.
        """
        inputs = self.inputs
        abundance, d_theta, d_width, flags = self.line_abundances(theta)
        if allowed is None:
            allowed = np.ones(abundance.shape, dtype=bool)
        usable = allowed & np.isfinite(abundance) & np.isfinite(d_width) & np.isfinite(inputs.zero_point)
        weight = usable.astype(float) if previous is None else np.where(usable, previous.weighting.weights, 0.0)
        common = common_abundances(inputs.is_fe2, abundance - inputs.zero_point, weight)
        if rough:
            deviation = abundance - inputs.zero_point - common[inputs.place]
            predicted = inputs.log_reduced_width - deviation / d_width
        else:
            predicted = self.predicted_widths(theta, common)
        return balance_state(
            inputs,
            theta,
            abundance,
            d_theta,
            d_width,
            predicted,
            flags,
            allowed,
            self.options.loss,
            metallicity_from_fe1="logg" in self.fixed,
            start=None if previous is None else previous.weighting,
            compiled=self.compiled,
        )

    def jacobian(self, theta: np.ndarray) -> np.ndarray:
        """dr/dtheta of `balance`, shape (4, 4)."""
        return self.balance(theta).jacobian

    def log_likelihood(self, theta: np.ndarray, allowed: np.ndarray | None = None) -> float:
        """ln of the density of the measured widths at theta, up to a constant; the Outside terms not included."""
        return self.state_log_likelihood(self.balance(theta, allowed))

    def state_log_likelihood(self, state: BalanceState) -> float:
        """`log_likelihood` from a balance that is at hand."""
        used = state.used
        if not used.any():
            return float("-inf")
        groups = self.inputs.is_fe2.astype(int) if "logg" in self.fixed else np.zeros(used.size, dtype=int)
        robust = np.where(state.weighting.robust > 0.0, state.weighting.robust, 1.0)
        return -0.5 * minus_two_log_density(
            state.relative_abundance[used],
            (state.weighting.variances.total / robust)[used],
            state.d_width[used],
            groups[used],
        )

    @cached_property
    def linear_outside(self) -> bool:
        """Whether all means of Outside terms are numbers, so that the terms are linear in theta."""
        return not any(callable(term.mean) for item in self.outside for term in item.terms)

    def outside_terms(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Whitened Outside differences and their Jacobian; the sum of squares is minus two ln of the prior."""
        return whitened_terms(self.outside, theta)


def common_abundances(is_fe2: np.ndarray, relative_abundance: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """Weighted mean of each ion, shape (2,); an ion without weight gets the other's."""
    means = np.full(2, np.nan)
    for i, ion in enumerate((~is_fe2, is_fe2)):
        total = weights[ion].sum()
        if total > 0.0:
            means[i] = weights[ion] @ np.where(weights[ion] > 0.0, relative_abundance[ion], 0.0) / total
    fallback = means[np.isfinite(means)]
    return np.where(np.isfinite(means), means, fallback[0] if fallback.size else 0.0)
