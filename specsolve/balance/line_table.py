"""The line table of a result: every line of the star, with its numbers or the reason why it has none."""

from __future__ import annotations

import numpy as np

from .influence import leave_one_out
from .line_results import LineResults
from .minima import REASON_MEASURED, REASON_PREDICTED, FoundMinimum, Search
from .problem import Problem
from .residuals import deviations
from .state import BalanceState

REASON_OUTSIDE_TABLE = "abundance_outside_table"
REASON_DOWN_WEIGHTED = "down_weighted"
DOWN_WEIGHT_LIMIT = 0.999  # a robust weight above this is a full one


def line_results(problem: Problem, search: Search | None, item: FoundMinimum | None) -> LineResults:
    """The line table: every line of the star, with its reason where it takes no part."""
    star, lines, rows = problem.star, problem.grid.lines, problem.rows
    n = len(star)
    found = problem.match.index >= 0
    place = np.where(found, problem.match.index, 0)

    def spread(values, fill=np.nan):
        out = np.full((n, *np.shape(values)[1:]), fill, dtype=np.asarray(values).dtype)
        out[rows] = values
        return out

    blank = np.full(rows.size, np.nan)
    if item is None:
        columns = {
            name: spread(blank)
            for name in (
                "predicted_width", "predicted_reduced_width", "strength", "abundance", "abundance_error",
                "width_error_dex",
                "relative_abundance", "deviation", "standardized", "d_abundance_d_width",
            )
        }  # fmt: skip
        columns |= {
            "robust_weight": np.zeros(n),
            "weight": np.zeros(n),
            "d_abundance": np.full((n, 4), np.nan),
            "influence": np.full((n, 4), np.nan),
            "used": np.zeros(n, bool),
            "interpolation_flags": np.zeros(n, np.uint8),
        }
        reason = problem.reasons.copy()
    else:
        state = item.minimum.state
        weighting = state.weighting
        total = weighting.variances.total
        wavelength_ma = lines.wavelength_air[problem.line_indices] * 1e3  # 1 Angstrom = 1000 mA
        columns = {
            "predicted_width": spread(10.0**state.predicted * wavelength_ma),
            "predicted_reduced_width": spread(state.predicted),
            "strength": spread(weighting.strength),
            "abundance": spread(state.abundance),
            "abundance_error": spread(np.where(np.isfinite(state.abundance), np.sqrt(total), np.nan)),
            "width_error_dex": spread(np.abs(state.d_width) * problem.inputs.sigma_logw),
            "relative_abundance": spread(state.relative_abundance),
            "deviation": spread(line_deviations(problem, state)),
            "standardized": spread(line_deviations(problem, state) / np.sqrt(total)),
            "d_abundance_d_width": spread(state.d_width),
            "robust_weight": spread(weighting.robust, 0.0),
            "weight": spread(weighting.weights, 0.0),
            "d_abundance": spread(state.d_theta),
            "influence": spread(leave_one_out(problem, state)),
            "used": spread(state.used, False),
            "interpolation_flags": spread(state.flags, 0),
        }
        reason = problem.reasons.copy()
        reason[rows] = _line_reasons(search, item)
    log_gf = np.where(np.isnan(star.log_gf) & found, lines.log_gf[place], star.log_gf)
    error = star.log_gf_error.copy()
    log_gf[rows], error[rows] = problem.log_gf, problem.log_gf_error
    with np.errstate(invalid="ignore", divide="ignore"):
        reduced = np.log10(
            np.where(star.equivalent_width > 0.0, star.equivalent_width, np.nan) / (star.wavelength_air * 1e3)
        )
    return LineResults(
        key=np.where(found, lines.key[place], ""),
        wavelength_air=np.where(found, lines.wavelength_air[place], star.wavelength_air),
        ion=star.ion,
        excitation_potential=np.where(found, lines.excitation_potential[place], star.excitation_potential),
        log_gf=log_gf,
        log_gf_error=error,
        equivalent_width=star.equivalent_width,
        equivalent_width_error=star.equivalent_width_error,
        error_assumed=star.error_assumed,
        reduced_width=reduced,
        zero_point=spread(problem.inputs.zero_point),
        reason=reason,
        **columns,
    )


def line_deviations(problem: Problem, state: BalanceState) -> np.ndarray:
    """Deviation from plane or mean of every line that has an abundance, used or not."""
    inputs, weights = problem.inputs, state.weighting.weights
    known = np.isfinite(state.relative_abundance)
    y = np.where(known, state.relative_abundance, 0.0)
    values = deviations(inputs.is_fe2, inputs.excitation_potential, state.weighting.strength, weights, y)
    return np.where(known, values, np.nan)


def _line_reasons(search: Search, item: FoundMinimum) -> np.ndarray:
    state = item.minimum.state
    reason = np.full(state.used.size, "", dtype="U32")
    reason[state.used & (state.weighting.robust < DOWN_WEIGHT_LIMIT)] = REASON_DOWN_WEIGHTED
    reason[~state.used] = REASON_OUTSIDE_TABLE
    reason[~item.allowed] = REASON_PREDICTED
    reason[~search.preliminary] = REASON_MEASURED
    return reason
