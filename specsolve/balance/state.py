"""The balance at one point: line abundances turned into residuals with weights that have settled.

At a given theta the robust weights w, the line-to-line term s and the strength axis x depend on each other; they
are iterated to a
fixed point here, which needs no further look at the grid. NumPy reference; `kernel.py` holds the compiled twin.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .residuals import balance_operator, deviations, residual_covariance, residual_vector
from .robust import HUBER_K, line_to_line_terms, robust_weights
from .strength import LineVariances, line_variances, strength_axis

MAX_PASSES = 100
WEIGHT_TOLERANCE = 1e-9
SCATTER_TOLERANCE = 1e-10  # dex


@dataclass(frozen=True, eq=False)
class LineInputs:
    """Constant per-line inputs of the balance, each of shape (n_lines,).

    Attributes
    ----------
    is_fe2 : ndarray of bool
    excitation_potential : ndarray
        [eV].
    log_reduced_width, sigma_logw : ndarray
        log10(W/lambda) and its error [dex].
    sigma_gf : ndarray
        [dex]; nan = unknown; zero in differential work.
    zero_point : ndarray
        [dex].
    zero_point_covariance : ndarray, shape (n_lines, n_lines), or None
        [dex^2].
    differential : bool
    zero_point_noise : ndarray, or None for the diagonal of the covariance
        Its part that is independent from line to line [dex^2].
    """

    is_fe2: np.ndarray
    excitation_potential: np.ndarray
    log_reduced_width: np.ndarray
    sigma_logw: np.ndarray
    sigma_gf: np.ndarray
    zero_point: np.ndarray
    zero_point_covariance: np.ndarray | None
    differential: bool
    zero_point_noise: np.ndarray | None = None

    @cached_property
    def place(self) -> np.ndarray:
        """0 for a line of the first ion, 1 for one of the second."""
        return self.is_fe2.astype(np.int64)

    @cached_property
    def known_sigma_gf(self) -> np.ndarray:
        """`sigma_gf` with zero where it is unknown."""
        return np.where(np.isnan(self.sigma_gf), 0.0, self.sigma_gf)

    @cached_property
    def gf_unknown(self) -> np.ndarray:
        """Lines whose line-to-line term stands for their log gf error; none in differential work."""
        return np.isnan(self.sigma_gf) & (not self.differential)

    @cached_property
    def zero_point_variance(self) -> np.ndarray:
        """The zero points' variances that are independent from line to line; these enter the weights."""
        if self.zero_point_covariance is None:
            return np.zeros(self.zero_point.shape)
        return np.diag(self.zero_point_covariance) if self.zero_point_noise is None else self.zero_point_noise


@dataclass(frozen=True, eq=False)
class Weighting:
    """Weights that have settled at one point.

    Attributes
    ----------
    robust : ndarray, shape (n_lines,)
        1 = full weight; 0 = not used.
    scatter : ndarray, shape (2,)
        Line-to-line term of each ion [dex].
    variances : LineVariances
    strength : ndarray, shape (n_lines,)
    deviation : ndarray, shape (n_lines,)
    settled : bool
    """

    robust: np.ndarray
    scatter: np.ndarray
    variances: LineVariances
    strength: np.ndarray
    deviation: np.ndarray
    settled: bool

    @property
    def weights(self) -> np.ndarray:
        """robust / v_i, shape (n_lines,) [dex^-2]."""
        return self.robust / self.variances.total


@dataclass(frozen=True, eq=False)
class BalanceState:
    """Everything about the balance at one theta.

    Attributes
    ----------
    theta : ndarray, shape (4,)
        teff, logg, mh, vmic.
    abundance, relative_abundance, d_width : ndarray, shape (n_lines,)
        A_i, A_i - zero point, dA/dlog10 W.
    d_theta : ndarray, shape (n_lines, 4)
    predicted : ndarray, shape (n_lines,)
        Predicted log10(W/lambda).
    flags : ndarray of uint8, shape (n_lines,)
        Of the interpolation.
    used : ndarray of bool, shape (n_lines,)
        Lines with an abundance here that were not dropped before.
    weighting : Weighting
    operator : ndarray, shape (4, n_lines)
        G with the weights frozen.
    response : ndarray, shape (4, n_lines)
        dr/dA with the weights free to follow (Huber: the lines in the core); equals `operator` without a robust loss.
    residuals : ndarray, shape (4,)
    jacobian : ndarray, shape (4, 4)
        dr/dtheta.
    covariance_star, covariance_list : ndarray, shape (4, 4)
        Of the residuals.
    """

    theta: np.ndarray
    abundance: np.ndarray
    relative_abundance: np.ndarray
    d_theta: np.ndarray
    d_width: np.ndarray
    predicted: np.ndarray
    flags: np.ndarray
    used: np.ndarray
    weighting: Weighting
    operator: np.ndarray
    response: np.ndarray
    residuals: np.ndarray
    jacobian: np.ndarray
    covariance_star: np.ndarray
    covariance_list: np.ndarray

    @property
    def covariance(self) -> np.ndarray:
        """C = G V G^T."""
        return self.covariance_star + self.covariance_list


def residual_jacobian(response: np.ndarray, d_theta: np.ndarray) -> np.ndarray:
    """dr/dtheta = (dr/dA)(dA/dtheta), minus one for the metallicity of the atmosphere."""
    jacobian = response @ np.where(np.isfinite(d_theta), d_theta, 0.0)
    jacobian[2, 2] -= 1.0
    return jacobian


def settle(
    inputs: LineInputs,
    relative_abundance: np.ndarray,
    d_width: np.ndarray,
    predicted: np.ndarray,
    used: np.ndarray,
    loss: str,
    start: Weighting | None = None,
) -> Weighting:
    """Iterate weights, line-to-line term and strength axis to their common fixed point.

    Parameters
    ----------
    inputs : LineInputs
    relative_abundance, d_width, predicted : ndarray, shape (n_lines,)
        At one theta; nan allowed where `used` is false.
    used : ndarray of bool, shape (n_lines,)
    loss : str
        See `robust_weights`.
    start : Weighting, optional
        Where to begin; changes the speed alone.
    """
    y = np.where(used, relative_abundance, 0.0)
    slope = np.where(used, d_width, 1.0)
    x_predicted = np.where(used & np.isfinite(predicted), predicted, inputs.log_reduced_width)
    sigma_gf, extra = inputs.sigma_gf, inputs.zero_point_variance
    weights, scatter = start_values(used, start)
    settled = False
    for _ in range(MAX_PASSES):
        variances = line_variances(slope, inputs.sigma_logw, sigma_gf, scatter[inputs.place])
        if extra.any():
            variances = LineVariances(width=variances.width, gf=variances.gf + extra, scatter=variances.scatter)
        strength = strength_axis(inputs.log_reduced_width, x_predicted, variances, sigma_gf, inputs.differential)
        total = variances.total
        deviation = deviations(inputs.is_fe2, inputs.excitation_potential, strength, weights / total, y)
        new_scatter = line_to_line_terms(inputs.is_fe2, deviation, variances.width + variances.gf, used, scatter)
        total = variances.width + variances.gf + new_scatter[inputs.place] ** 2
        new_weights = np.where(used, robust_weights(deviation / np.sqrt(total), loss), 0.0)
        change = float(np.max(np.abs(new_weights - weights), initial=0.0))
        change_scatter = float(np.max(np.abs(new_scatter - scatter)))
        weights, scatter = new_weights, new_scatter
        if change < WEIGHT_TOLERANCE and change_scatter < SCATTER_TOLERANCE:
            settled = True
            break
    variances = LineVariances(width=variances.width, gf=variances.gf, scatter=scatter[inputs.place] ** 2)
    return Weighting(
        robust=weights,
        scatter=scatter,
        variances=variances,
        strength=strength,
        deviation=np.where(used, deviation, np.nan),
        settled=settled,
    )


def start_values(used: np.ndarray, start: Weighting | None) -> tuple[np.ndarray, np.ndarray]:
    """Robust weights and line-to-line terms to begin with."""
    if start is None:
        return used.astype(float), np.zeros(2)
    return np.where(used, np.where(start.robust > 0.0, start.robust, 1.0), 0.0), start.scatter


def response_weights(weighting: Weighting, used: np.ndarray, loss: str) -> np.ndarray:
    """Weights psi'(z)/v whose plane operator is dr/dA of the robust fit; falls back on the frozen ones."""
    if loss == "none":
        return weighting.weights
    z = np.where(used, weighting.deviation, 0.0) / np.sqrt(weighting.variances.total)
    if loss == "huber":
        slope = (np.abs(z) <= HUBER_K).astype(float)
    else:
        # psi' of the Student t loss can be negative far out; zero keeps the operator that of a weighted plane.
        w = robust_weights(z, loss)
        slope = np.maximum(w * (1.0 - 2.0 * z**2 * w / 5.0), 0.0)
    return np.where(used, slope, 0.0) / weighting.variances.total


def balance_state(
    inputs: LineInputs,
    theta: np.ndarray,
    abundance: np.ndarray,
    d_theta: np.ndarray,
    d_width: np.ndarray,
    predicted: np.ndarray,
    flags: np.ndarray,
    allowed: np.ndarray,
    loss: str,
    metallicity_from_fe1: bool,
    start: Weighting | None = None,
    compiled: bool = False,
) -> BalanceState:
    """Residuals, operators and covariances at one theta from the line abundances there."""
    used = allowed & np.isfinite(abundance) & np.isfinite(d_width) & np.isfinite(inputs.zero_point)
    y = abundance - inputs.zero_point
    arguments = (inputs, y, d_width, d_theta, predicted, used, loss, metallicity_from_fe1, float(theta[2]), start)
    parts = _compiled_parts(*arguments) if compiled else _plain_parts(*arguments)
    weighting, operator, response, residuals, jacobian, star, shared = parts
    if inputs.zero_point_covariance is not None:
        shared = shared + residual_covariance(operator, inputs.zero_point_covariance)
    return BalanceState(
        theta=np.asarray(theta, float),
        abundance=abundance,
        relative_abundance=y,
        d_theta=d_theta,
        d_width=d_width,
        predicted=predicted,
        flags=flags,
        used=used,
        weighting=weighting,
        operator=operator,
        response=response,
        residuals=residuals,
        jacobian=jacobian,
        covariance_star=star,
        covariance_list=shared,
    )


def _plain_parts(inputs, y, d_width, d_theta, predicted, used, loss, metallicity_from_fe1, mh, start) -> tuple:
    """Weighting, G, dr/dA, r, dr/dtheta and the covariances of independent errors."""
    weighting = settle(inputs, y, d_width, predicted, used, loss, start)
    shape = (inputs.is_fe2, inputs.excitation_potential, weighting.strength)
    operator = balance_operator(*shape, weighting.weights, metallicity_from_fe1)
    response = balance_operator(*shape, response_weights(weighting, used, loss), metallicity_from_fe1)
    response = np.where(np.isfinite(response), response, operator)
    # With a covariance of the zero points its noise sits in variances.gf already; the full matrix replaces it.
    return (
        weighting,
        operator,
        response,
        residual_vector(operator, np.where(used, y, 0.0), mh),
        residual_jacobian(response, d_theta),
        residual_covariance(operator, weighting.variances.star),
        residual_covariance(operator, weighting.variances.gf - inputs.zero_point_variance),
    )


def _compiled_parts(inputs, y, d_width, d_theta, predicted, used, loss, metallicity_from_fe1, mh, start) -> tuple:
    """As `_plain_parts`, by the compiled kernel."""
    from .kernel import LOSS_CODES, project, settle_kernel

    robust, scatter = start_values(used, start)
    extra = inputs.zero_point_variance
    known = np.where(used, y, 0.0)
    robust, scatter, width, gf, strength, deviation, settled, operator, response = settle_kernel(
        inputs.is_fe2,
        inputs.excitation_potential,
        inputs.log_reduced_width,
        inputs.sigma_logw,
        inputs.known_sigma_gf,
        inputs.gf_unknown,
        extra,
        known,
        np.where(used, d_width, 1.0),
        np.where(used & np.isfinite(predicted), predicted, inputs.log_reduced_width),
        used,
        robust,
        scatter,
        LOSS_CODES[loss],
        metallicity_from_fe1,
    )
    variances = LineVariances(width=width, gf=gf, scatter=scatter[inputs.place] ** 2)
    weighting = Weighting(
        robust=robust,
        scatter=scatter,
        variances=variances,
        strength=strength,
        deviation=np.where(used, deviation, np.nan),
        settled=bool(settled),
    )
    rest = project(operator, response, variances.star, gf - extra, known, d_theta, mh)
    return (weighting, operator, response, *rest)
