"""Errors that stars share through one line list, as a few independent modes counted once.

An error e_l of log gf of line l moves star i by R_il e_l, and every other star that uses the line with it. So the list
covariance of stars i and j is sum_l R_il var_l R_jl^T (with a reference star its zero points' covariance takes the place
of the variances). Written as modes M_i, Cov_list(i, j) = M_i M_j^T, with the same unit normal numbers for all stars.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from specsolve.balance.problem import Problem

from .local import Point, line_responses

KEPT_SHARE = 1e-6  # of the variance may be lost when modes are dropped


def list_modes(problems: Sequence[Problem], points: Sequence[Point]) -> np.ndarray:
    """Modes of the list errors of several stars.

    Parameters
    ----------
    problems : sequence of Problem
    points : sequence of Point
        Their solutions, each with a state.

    Returns
    -------
    ndarray, shape (n_stars, 4, n_modes)
        ``modes[i] @ modes[j].T`` is the list covariance of stars i and j; for i = j it is the star's Cov_list.
    """
    keys = sorted({key for problem in problems for key in problem.keys.tolist()})
    place = {key: k for k, key in enumerate(keys)}
    variance = np.zeros(len(keys))
    zero = np.zeros((len(keys), len(keys)))
    responses = np.zeros((len(problems), 4, len(keys)))
    for i, (problem, point) in enumerate(zip(problems, points, strict=True)):
        index = np.array([place[key] for key in problem.keys.tolist()], dtype=np.int64)
        state = point.state
        responses[i][:, index] = np.where(state.used, line_responses(problem, state), 0.0)
        gf = np.where(state.used, state.weighting.variances.gf - problem.inputs.zero_point_variance, 0.0)
        variance[index] = np.maximum(variance[index], gf)
        if problem.inputs.zero_point_covariance is not None:
            zero[np.ix_(index, index)] = problem.inputs.zero_point_covariance
    root = np.sqrt(np.maximum(variance, 0.0))
    parts = responses * root
    if zero.any():
        values, vectors = np.linalg.eigh(zero)
        parts = np.concatenate([parts, responses @ (vectors * np.sqrt(np.maximum(values, 0.0)))], axis=2)
    return reduced(parts)


def reduced(parts: np.ndarray, largest: int | None = None) -> np.ndarray:
    """The same covariance with fewer modes, shape (n_stars, 4, n_modes).

    Columns are scaled parameter by parameter first, so that K and dex count alike.

    Parameters
    ----------
    parts : ndarray, shape (n_stars, 4, n_parts)
    largest : int, optional
        Keep at most so many.
    """
    n_stars = parts.shape[0]
    scale = np.sqrt(np.mean(np.sum(parts**2, axis=2), axis=0))
    scale = np.where(scale > 0.0, scale, 1.0)
    flat = (parts / scale[:, None]).reshape(n_stars * 4, -1)
    left, singular, _ = np.linalg.svd(flat, full_matrices=False)
    total = np.sum(singular**2)
    kept = int(np.searchsorted(np.cumsum(singular**2), (1.0 - KEPT_SHARE) * total)) + 1 if total > 0.0 else 1
    kept = min(kept, singular.size, largest or singular.size)
    return (left[:, :kept] * singular[:kept]).reshape(n_stars, 4, kept) * scale[:, None]
