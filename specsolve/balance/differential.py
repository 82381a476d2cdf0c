"""Zero points from a reference star: its line abundances at its given parameters, its vmic found on our own scale."""

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
from .star import Star
from .uncertainty import parameter_covariances
from .zero_points import ZeroPoints

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
    """

    zero_points: ZeroPoints
    theta: np.ndarray
    n_lines: int


def reference_star(
    star: Star,
    grid: Any,
    treatment: str = "lte",
    parameters: Mapping[str, float] | None = None,
    options: Options | None = None,
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
    star_covariance, list_covariance = parameter_covariances(problem, best.state)
    vmic_variance = float(star_covariance[3, 3] + list_covariance[3, 3])
    everything = problem.replace(
        options=Options.from_dict({**options.as_dict(), "worst_grade": WORST_GRADE_DIFFERENTIAL})
    )
    abundance, d_theta, d_width, _ = everything.line_abundances(best.theta)
    known = np.isfinite(abundance)
    noise = (d_width * everything.inputs.sigma_logw)[known] ** 2
    d_vmic = d_theta[known, 3]
    covariance = np.diag(noise) + vmic_variance * np.outer(d_vmic, d_vmic)
    theta = best.theta
    # Both stars use one log gf, so it cancels: the zero point is kept on the list's log gf.
    values = (abundance + everything.log_gf_shift)[known] - theta[2]
    words = (
        f"lines of {star.name} at {theta[0]:.0f} K, {theta[1]:.3f}, {theta[2]:+.3f} ({source}), "
        f"vmic {theta[3]:.3f} km/s"
    )
    zero_points = ZeroPoints.reference(
        dict(zip(everything.keys[known].tolist(), values.tolist(), strict=True)), covariance, words
    )
    return ReferenceStar(zero_points, theta, int(known.sum()))
