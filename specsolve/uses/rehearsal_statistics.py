"""What the trials of one point say: bias, scatter, coverage, and the S/N that a wanted error needs."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.balance.problem import Problem
from specsolve.balance.solution import OUTSIDE_GRID, PARAMETER_NAMES, SOLVED, TIED

from .local import Point, line_responses

if TYPE_CHECKING:
    from .rehearsal import Plan

WRONG_FROM = 5.0  # errors
MAD_TO_SIGMA = 1.4826  # standard deviation of a normal distribution over its median absolute deviation
EACH, ONCE, NONE = "each", "once", "none"


def trial_statistics(
    plan: Plan, theta: np.ndarray, snr: float, found: Sequence[tuple[Problem, Point]]
) -> dict[str, Any]:
    """Columns of one point from its trials: bias, scatter, coverage, fractions, S/N needed."""
    status = [point.status for _, point in found]
    good = [
        (problem, point) for problem, point in found if point.status == SOLVED and np.isfinite(point.cov_star).all()
    ]
    n = len(found)
    out: dict[str, Any] = {
        "n_trials": n,
        "n_good": len(good),
        "fraction_tied": status.count(TIED) / n if plan.full_search else np.nan,
        "fraction_outside": status.count(OUTSIDE_GRID) / n,
        "fraction_failed": (n - len(good) - status.count(TIED) - status.count(OUTSIDE_GRID)) / n,
    }
    if not good:
        return out
    values = np.array([point.theta for _, point in good])
    star = np.array([np.sqrt(np.diag(point.cov_star)) for _, point in good])
    total = np.array([np.sqrt(np.diag(point.cov_star + point.cov_list)) for _, point in good])
    middle = np.median(values, axis=0)
    scatter = MAD_TO_SIGMA * np.median(np.abs(values - middle), axis=0) if len(good) > 1 else np.full(4, np.nan)
    error = total if plan.gf_errors == EACH else star
    out["fraction_wrong"] = float(np.mean((np.abs(values - theta) > WRONG_FROM * total).any(axis=1)))
    # Of the median of n normal numbers: 1.253 sigma / sqrt(n).
    mean_error = 1.2533 * scatter / np.sqrt(len(good))
    needed = needed_signal_to_noise(plan, *good[0], snr)
    for k, name in enumerate(PARAMETER_NAMES):
        out |= {
            f"recovered_{name}": middle[k],
            f"bias_{name}": middle[k] - theta[k],
            f"bias_{name}_error": mean_error[k],
            f"scatter_{name}": scatter[k],
            f"error_{name}": float(np.median(total[:, k])),
            f"error_star_{name}": float(np.median(star[:, k])),
            f"coverage_{name}": float(np.mean(np.abs(values[:, k] - middle[k]) <= error[:, k])),
            f"needed_{name}": needed.get(name, np.nan),
        }
    return out


def needed_signal_to_noise(plan: Plan, problem: Problem, point: Point, snr: float) -> dict[str, float]:
    """S/N at which the total error is as wanted: the part from the width errors goes as its inverse, the rest stays.

    nan where the rest alone is larger, or where the noise is a law.
    """
    if not plan.wanted or not np.isfinite(plan.noise.resolving_power):
        return {}
    state = point.state
    photon = np.where(state.used, state.weighting.variances.width, 0.0)
    of_widths = line_responses(problem, state) ** 2 @ photon
    total = np.diag(point.cov_star + point.cov_list)
    out = {}
    for name, wanted in plan.wanted.items():
        k = PARAMETER_NAMES.index(name)
        room = wanted**2 - max(total[k] - of_widths[k], 0.0)
        out[name] = float(snr * np.sqrt(of_widths[k] / room)) if room > 0.0 else float("nan")
    return out
