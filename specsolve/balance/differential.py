"""Zero points from a reference star: its line abundances at its given parameters, its vmic found on our own scale.

The zero point of a line is z = A(W; p, xi) - [Fe/H] with the given parameters p = (teff, logg, [Fe/H]) and the vmic xi
that balances its lines, a function of p and of the widths. To first order

    dz = (I + a g^T) dA + (D + a h^T) dp,        a = dA/dxi,  D = dA/dp - d[Fe/H]/dp,

with g = dxi/dA (from the balance, dA an error of the line abundances from width noise) and h = dxi/dp. The gf errors
cancel line by line, and with them the line-to-line scatter, which is mostly theirs; what both do to xi stays. All of it
is shared by every star that uses the reference, so it goes into Cov_list.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from specsolve.errors import ConvergenceError, InputError, NotEnoughLinesError

from .minima import enough_lines, local_solve, preliminary_lines, shortage
from .options import Options
from .outside import Outside
from .own_sun import SUN_NAME, SUN_PARAMETER_SOURCE, SUN_PARAMETERS
from .problem import WORST_GRADE_DIFFERENTIAL, Problem
from .solution import PARAMETER_NAMES
from .star import Star
from .state import BalanceState
from .uncertainty import parameter_covariances
from .zero_points import ZeroPoints

GIVEN, VMIC = slice(0, 3), 3  # places in theta
START_VMIC = (1.0, 2.0)  # km/s, where the search for the reference star's vmic begins


@dataclass(frozen=True, eq=False)
class ReferenceStar:
    """A reference star solved at its given parameters.

    Attributes
    ----------
    zero_points : ZeroPoints
    theta : ndarray, shape (4,)
        teff, logg, feh as given, vmic as found (or given).
    n_lines : int
    covariance : ndarray, shape (4, 4)
        Of theta: as given, and of the vmic as it follows from that and from the lines.
    note : str
        One sentence about its errors.
    """

    zero_points: ZeroPoints
    theta: np.ndarray
    n_lines: int
    covariance: np.ndarray
    note: str


def reference_star(
    star: Star,
    grid: Any,
    treatment: str = "lte",
    parameters: Mapping[str, float] | None = None,
    options: Options | None = None,
    parameter_errors: Mapping[str, float] | None = None,
) -> ReferenceStar:
    """Solve a reference star for its vmic and line abundances.

    Parameters
    ----------
    star : Star
    grid : ResponseGrid
    treatment : str
    parameters : mapping, optional
        teff [K], logg, feh; `vmic` [km/s] too if it shall not be found. The Sun's nominal ones by default,
        if the star is called Sun.
    options : Options, optional
    parameter_errors : mapping, optional
        Errors of the given parameters, independent of each other; those not named are exact.

    Raises
    ------
    InputError
        If the parameters are not known.
    NotEnoughLinesError, ConvergenceError, OutOfGridError
    """
    options = options or Options()
    source = "given parameters"
    if parameters is None:
        if star.name.strip().lower() != SUN_NAME.lower():
            raise InputError(
                f"the parameters of the reference star '{star.name}' are not known: give its teff, logg and feh."
            )
        parameters, source = SUN_PARAMETERS, SUN_PARAMETER_SOURCE
    absent = [name for name in ("teff", "logg", "feh") if name not in parameters]
    if absent:
        raise InputError(f"the reference star '{star.name}' needs {', '.join(absent)} too.")
    problem = Problem(
        star=star,
        grid=grid,
        treatment=treatment,
        outside=(Outside.fixed(source, **{name: float(value) for name, value in parameters.items()}),),
        options=options,
    )
    preliminary = preliminary_lines(problem)
    if not enough_lines(problem, preliminary):
        message, counts = shortage(problem, preliminary)
        raise NotEnoughLinesError(f"reference star '{star.name}': {message}", counts=counts)
    starts = (parameters["vmic"],) if "vmic" in parameters else START_VMIC
    minima = []
    for vmic in starts:
        theta = np.array([parameters["teff"], parameters["logg"], parameters["feh"], vmic], float)
        minimum, _ = local_solve(problem, theta, preliminary)
        if minimum.state is not None and minimum.converged and not minimum.at_bound.any():
            minima.append(minimum)
    if not minima:
        raise ConvergenceError(
            f"reference star '{star.name}': no microturbulence balances its lines at the given "
            "parameters; give its vmic."
        )
    best = min(minima, key=lambda m: m.objective)
    errors = _checked_errors(star.name, parameters, parameter_errors or {})
    everything = problem.replace(
        options=Options.from_dict({**options.as_dict(), "worst_grade": WORST_GRADE_DIFFERENTIAL})
    )
    abundance, d_theta, d_width, _ = everything.line_abundances(best.theta)
    known = np.flatnonzero(np.isfinite(abundance))
    theta_covariance, gain, follow = vmic_errors(problem, best.state, errors, "vmic" in parameters)
    place = {key: i for i, key in enumerate(problem.keys.tolist())}
    chosen = [place.get(key, -1) for key in everything.keys[known].tolist()]
    noise = (d_width * everything.inputs.sigma_logw)[known] ** 2
    through_vmic = np.where(np.array(chosen) >= 0, gain[chosen], 0.0)
    d_vmic = d_theta[known, VMIC]
    d_given = d_theta[known][:, GIVEN].copy()
    d_given[:, 2] -= 1.0  # the [Fe/H] that is subtracted
    from_noise = np.eye(known.size) + np.outer(d_vmic, through_vmic)
    from_given = (d_given + np.outer(d_vmic, follow)) * errors[GIVEN]
    variances = best.state.weighting.variances  # gf errors and line-to-line scatter (mostly gf) cancel, not so in vmic
    gf_in_vmic = float(gain**2 @ np.where(best.state.used, variances.gf + variances.scatter, 0.0))
    vmic_known_to = gf_in_vmic + (errors[VMIC] ** 2 if "vmic" in parameters else 0.0)
    covariance = (
        (from_noise * noise) @ from_noise.T + from_given @ from_given.T + vmic_known_to * np.outer(d_vmic, d_vmic)
    )
    theta = best.theta
    # Both stars use one log gf, so it cancels: the zero point is kept on the list's log gf.
    values = (abundance + everything.log_gf_shift)[known] - theta[2]
    words = (
        f"lines of {star.name} at {theta[0]:.0f} K, {theta[1]:.3f}, {theta[2]:+.3f} ({source}), "
        f"vmic {theta[3]:.3f} km/s"
    )
    zero_points = ZeroPoints.reference(
        dict(zip(everything.keys[known].tolist(), values.tolist(), strict=True)), covariance, words, noise
    )
    sigma = np.sqrt(np.diag(theta_covariance))
    note = (
        f"reference star: errors {sigma[0]:.0f} K, {sigma[1]:.3f}, {sigma[2]:.3f} as given, vmic "
        f"{'as given' if 'vmic' in parameters else 'from its lines'} to {sigma[3]:.3f} km/s; they are in the list part of "
        "the errors of all other stars"
    )
    return ReferenceStar(zero_points, theta, int(known.size), theta_covariance, note)


def vmic_errors(
    problem: Problem, state: BalanceState, errors: np.ndarray, vmic_given: bool
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """How the vmic of a reference star follows its lines and its given parameters.

    Parameters
    ----------
    problem : Problem
        With teff, logg, feh fixed (and vmic, if it is given).
    state : BalanceState
    errors : ndarray, shape (4,)
        Of the given parameters.
    vmic_given : bool

    Returns
    -------
    covariance : ndarray, shape (4, 4)
        Of theta.
    gain : ndarray, shape (n_lines,)
        dxi/dA of each line [km/s per dex]; zero if the vmic is given.
    follow : ndarray, shape (3,)
        dxi/d(teff, logg, feh); zero if the vmic is given.
    """
    covariance = np.diag(errors**2)
    gain, follow = np.zeros(state.used.size), np.zeros(3)
    if vmic_given:
        return covariance, gain, follow
    slope = state.jacobian[VMIC, VMIC]
    gain = -np.where(np.isfinite(state.response[VMIC]), state.response[VMIC], 0.0) / slope
    follow = -state.jacobian[VMIC, GIVEN] / slope
    star, shared = parameter_covariances(problem, state)
    given = np.diag(errors[GIVEN] ** 2)
    covariance = np.zeros((4, 4))
    covariance[:VMIC, :VMIC] = given
    covariance[:VMIC, VMIC] = covariance[VMIC, :VMIC] = given @ follow
    covariance[VMIC, VMIC] = star[VMIC, VMIC] + shared[VMIC, VMIC] + follow @ given @ follow
    return covariance, gain, follow


def _checked_errors(name: str, parameters: Mapping[str, float], errors: Mapping[str, float]) -> np.ndarray:
    for parameter, error in errors.items():
        if parameter not in parameters:
            raise InputError(f"the reference star '{name}' has an error of {parameter} but no value.")
        if not (np.isfinite(error) and error >= 0.0):
            raise InputError(f"the reference star '{name}': the error of {parameter}, {error:g}, must not be negative.")
    return np.array([float(errors.get(parameter, 0.0)) for parameter in PARAMETER_NAMES])
