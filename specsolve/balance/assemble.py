"""From the chosen minimum to the `Solution` that is reported."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.errors import InputError
from specsolve.grid.perturbations import ALPHA, TESTED_RANGE
from specsolve.matter.composition import alpha_law

from .line_table import line_results
from .minima import REASON_MEASURED, REASON_PREDICTED, Search
from .outside_share import outside_share
from .own_sun import SolarLines
from .problem import Problem
from .residuals import plane_operator
from .robust import HUBER_K
from .solution import (
    OUTSIDE_GRID,
    PARAMETER_NAMES,
    RESIDUAL_OF_PARAMETER,
    UNSOLVED,
    Decision,
    IonAbundance,
    LineResults,
    Solution,
    Trend,
)
from .star import ASSUMED_ERROR_FLOOR_MA, ASSUMED_ERROR_FRACTION
from .state import BalanceState
from .tiebreak import Ranking
from .uncertainty import parameter_covariances, sensitivities
from .validity import line_flags, validity_statements

MAX_UNMATCHED = 1000
OUTSIDE_DISAGREES = 3.0  # of its error between outside knowledge and the solution (common practice, no source)
FACE_SHARE = 0.015  # of an axis: how near to its end a stopped parameter lies (0.05 km/s in vmic)


def solved(problem: Problem, search: Search, ranking: Ranking, sun: SolarLines | None) -> Solution:
    """The `Solution` for the first candidate of a ranking."""
    item = ranking.found[0]
    state, minimum = item.minimum.state, item.minimum
    star_cov, list_cov = parameter_covariances(problem, state)
    lines = line_results(problem, search, item)
    covered = problem.active
    statements = validity_statements(minimum.theta, problem.treatment)
    flags = [
        *item.flags,
        *statements[0],
        *line_flags(lines, np.sqrt(np.diag(star_cov)), covered, problem.zero_points.differential),
    ]
    if not np.isfinite(star_cov).all():
        flags.append("covariance_undefined")
    status, reason = ranking.status, ""
    if ranking.candidates[0].set_aside:
        outside = {"outside_grid", "stopped_by_missing_node"} & set(item.flags)
        status = OUTSIDE_GRID if outside else UNSOLVED
        reason = ranking.candidates[0].set_aside
        if "outside_grid" in outside:
            reason = _where_outside(problem, minimum.theta)
    elif status == "tied":
        reason = "the rule cannot separate the near-equal candidates"
    robust = state.weighting.robust
    try:
        for known in problem.outside:
            known.check(minimum.theta)
    except InputError as error:
        status, reason = UNSOLVED, str(error)
    outside, _ = problem.outside_terms(minimum.theta)
    if outside.size and np.abs(outside).max() > OUTSIDE_DISAGREES:
        flags.append("outside_disagrees")
    alpha = getattr(problem.grid, "alpha", None)
    law = alpha_law(float(minimum.theta[2]))
    if alpha is not None and abs(alpha - law) > TESTED_RANGE[ALPHA]:
        flags.append("alpha_beyond_tested_range")
    fe1, fe2 = ion_abundances(problem, state, sun)
    n_used = int(state.used.sum())
    deviation = state.weighting.deviation
    used = state.used & (robust > 0.0)
    weight = state.weighting.weights
    scatter = float(np.sqrt(np.average(deviation[used] ** 2, weights=weight[used]))) if used.sum() > 1 else float("nan")
    return dataclasses.replace(
        _frame(problem),
        status=status,
        reason=reason,
        flags=tuple(dict.fromkeys(flags)),
        parameters=minimum.theta.copy(),
        cov_star=star_cov,
        cov_list=list_cov,
        residuals=state.residuals,
        residual_covariance=state.covariance,
        chi2=minimum.objective,
        log_likelihood=ranking.candidates[0].log_likelihood,
        degrees_of_freedom=n_used - problem.free.size,
        line_scatter=scatter,
        fe1=fe1,
        fe2=fe2,
        lines=lines,
        trends=trends(problem, state),
        candidates=ranking.candidates,
        decisions=_decisions(problem, ranking, lines, minimum.theta),
        sensitivities=sensitivities(problem, state),
        outside=tuple(_outside_entries(problem, minimum.theta)),
        outside_share=outside_share(problem, state),
        alpha=law if alpha is None else alpha,
        alpha_given=alpha is not None,
        validity=statements[1],
        n_used=n_used,
        iterations=minimum.iterations,
    )


def unsolved(problem: Problem, reason: str, status: str = UNSOLVED, flags: tuple[str, ...] = ()) -> Solution:
    """The `Solution` of a star that has none: parameters nan, the reason stated, the lines listed."""
    return dataclasses.replace(_frame(problem), status=status, reason=reason, flags=flags)


def _where_outside(problem: Problem, theta: np.ndarray) -> str:
    low, high = problem.bounds
    faces = [
        f"{name} = {value:.4g}"
        for name, value, a, b, place in zip(PARAMETER_NAMES, theta, low, high, range(4), strict=True)
        if place in problem.free and (value <= a + FACE_SHARE * (b - a) or value >= b - FACE_SHARE * (b - a))
    ]
    if len(faces) == 1 and faces[0].startswith("vmic"):
        return f"these lines do not fix the microturbulence inside the grid ({faces[0]} km/s at its edge): fix vmic"
    return f"no balance inside the grid: the best point lies at its edge ({', '.join(faces)})"


def _frame(problem: Problem) -> Solution:
    """Everything about a solve that does not need a solution."""
    nan4, nan44 = np.full(4, np.nan), np.full((4, 4), np.nan)
    star, grid = problem.star, problem.grid
    n_input, n_matched = len(star), problem.match.n_matched
    notes = list(star.notes)
    n_assumed = int(star.error_assumed.sum())
    if n_assumed:
        notes.append(
            f"{n_assumed} of {n_input} width errors assumed: {ASSUMED_ERROR_FLOOR_MA:g} mA and "
            f"{100 * ASSUMED_ERROR_FRACTION:g} % of the width in quadrature; the scatter of the lines adds the rest"
        )
    notes.append(f"{n_matched} of {n_input} lines are in the grid")
    missing = np.flatnonzero(problem.match.index < 0)[:MAX_UNMATCHED]
    fixed = tuple(name for name in PARAMETER_NAMES if name in problem.fixed)
    return Solution(
        star=star.name,
        treatment=problem.treatment,
        status=UNSOLVED,
        reason="",
        flags=(),
        parameters=nan4.copy(),
        fixed=fixed,
        cov_star=nan44.copy(),
        cov_list=nan44.copy(),
        residuals=nan4.copy(),
        residual_covariance=nan44.copy(),
        removed_residuals=tuple(RESIDUAL_OF_PARAMETER[name] for name in fixed),
        chi2=float("nan"),
        log_likelihood=float("nan"),
        degrees_of_freedom=0,
        line_scatter=float("nan"),
        fe1=_frame_ion(problem.pair[0]),
        fe2=_frame_ion(problem.pair[1]),
        solar_iron=SOLAR_IRON,
        zero_point_source=problem.zero_points.source,
        lines=line_results(problem, None, None),
        outside=tuple(_outside_entries(problem)),
        known=dict(star.known),
        notes=tuple(notes),
        n_input=n_input,
        n_matched=n_matched,
        unmatched=tuple(f"{star.wavelength_air[i]:.3f} {star.ion[i]}" for i in missing),
        grid_identity=getattr(grid, "unperturbed", grid).identity,
        atmospheres_identity=grid.atmospheres_identity,
        line_list_hash=grid.lines.identity,
        input_hash=star.identity,
        grid_description=grid.description,
        fe2_scale=problem.options.fe2_scale,
        options=problem.options.as_dict(),
    )


def _outside_entries(problem: Problem, theta: np.ndarray | None = None) -> list[dict[str, Any]]:
    """What was known; values that follow the parameters as they are at theta, nan without it."""
    entries = []
    for item in problem.outside:
        for name, value in item.fixed_values.items():
            entries.append({"name": name, "mean": value, "sigma": 0.0, "source": item.source})
        for term in item.terms:
            mean = term.mean
            if callable(mean):
                mean = float("nan") if theta is None else mean(theta)[0]
            entries.append({"name": term.name, "mean": float(mean), "sigma": term.sigma, "source": item.source})
    return entries


def ion_abundances(problem: Problem, state: BalanceState, sun: SolarLines | None) -> tuple[IonAbundance, IonAbundance]:
    """Mean abundances of both ions at a state."""
    inputs, weighting = problem.inputs, state.weighting
    weights = np.where(state.used, weighting.weights, 0.0)
    solar = ((float("nan"), 0),) * 2
    if sun is not None and sun.abundance:
        solar = sun.means(problem.keys, problem.log_gf_shift, inputs.is_fe2, weights)
    out = []
    for place, name in enumerate(problem.pair):
        mask = (inputs.is_fe2 == bool(place)) & (weights > 0.0)
        number = int(mask.sum())
        if number == 0:
            out.append(dataclasses.replace(_frame_ion(name), own_sun=solar[place][0], own_sun_n_lines=solar[place][1]))
            continue
        w = weights[mask] / weights[mask].sum()
        mean = float(w @ state.abundance[mask])
        deviation = state.relative_abundance[mask] - float(w @ state.relative_abundance[mask])
        gf = weighting.variances.gf[mask] - inputs.zero_point_variance[mask]
        list_variance = float(w**2 @ gf)
        if inputs.zero_point_covariance is not None:
            list_variance += float(w @ inputs.zero_point_covariance[np.ix_(mask, mask)] @ w)
        out.append(
            IonAbundance(
                ion=name,
                abundance=mean,
                error_star=float(np.sqrt(w**2 @ weighting.variances.star[mask])),
                error_list=float(np.sqrt(list_variance)),
                scatter=float(np.sqrt(w @ deviation**2 * number / (number - 1))) if number > 1 else float("nan"),
                line_to_line=float(weighting.scatter[place]),
                n_lines=number,
                feh=float(w @ state.relative_abundance[mask]),
                feh_solar_iron=mean - SOLAR_IRON,
                own_sun=solar[place][0],
                own_sun_n_lines=solar[place][1],
                feh_own_sun=mean - solar[place][0],
            )
        )
    return out[0], out[1]


def _frame_ion(name: str) -> IonAbundance:
    nan = float("nan")
    return IonAbundance(
        ion=name, abundance=nan, error_star=nan, error_list=nan, scatter=nan, line_to_line=nan, n_lines=0, feh=nan,
        feh_solar_iron=nan, own_sun=nan, own_sun_n_lines=0, feh_own_sun=nan,
    )  # fmt: skip


def trends(problem: Problem, state: BalanceState) -> tuple[Trend, ...]:
    """Slopes of Fe I against both axes, and of Fe II against strength, with covariances for error bands."""
    inputs, weighting = problem.inputs, state.weighting
    total = weighting.variances.total
    out = []
    plan = (
        ("excitation_slope", 0, "excitation_potential", inputs.excitation_potential, 1),
        ("strength_slope", 0, "strength", weighting.strength, 2),
        ("fe2_strength_slope", 1, "strength", weighting.strength, 2),
    )
    for name, ion, axis, x, row in plan:
        mask = (inputs.is_fe2 == bool(ion)) & state.used
        energy = inputs.excitation_potential if ion == 0 else np.zeros(x.size)
        weights = weighting.weights[mask]
        operator = plane_operator(energy[mask], weighting.strength[mask], weights)[[0, row]]
        if mask.sum() < 3 or not np.isfinite(operator).all():
            continue
        y = state.relative_abundance[mask]
        covariance = (operator * total[mask]) @ operator.T
        out.append(
            Trend(
                name=name,
                ion=problem.pair[ion],
                axis=axis,
                slope=float(operator[1] @ y),
                slope_error=float(np.sqrt(covariance[1, 1])),
                intercept=float(operator[0] @ y),
                pivot=float(weights @ x[mask] / weights.sum()),
                covariance=covariance,
                n_lines=int(mask.sum()),
            )
        )
    return tuple(out)


def _decisions(problem: Problem, ranking: Ranking, lines: LineResults, theta: np.ndarray) -> tuple[Decision, ...]:
    """The rule's steps, then what was fixed or known beforehand, then every line that was cut or down-weighted."""
    nan = float("nan")
    entries: list[tuple] = []
    for item in problem.outside:
        for name, value in item.fixed_values.items():
            entries.append(("fix", name, value, nan, "fixed", item.source))
        for term in item.terms:
            mean = float(term.mean(theta)[0] if callable(term.mean) else term.mean)
            entries.append(("outside", term.name, mean, term.sigma, "Gaussian term", term.source))
    low, high = problem.options.reduced_width_range
    for i in np.flatnonzero(lines.reason != ""):
        subject = lines.key[i] or f"{lines.ion[i]} {lines.wavelength_air[i]:.3f}"
        if lines.used[i]:
            entries.append(
                ("down_weight", subject, float(lines.standardized[i]), HUBER_K, f"weight {lines.robust_weight[i]:.2f}",
                 "deviation from the plane in its own errors")
            )  # fmt: skip
        else:
            predicted = float(lines.predicted_reduced_width[i])
            strength = lines.reason[i] in (REASON_PREDICTED, REASON_MEASURED)
            value = (
                (predicted if lines.reason[i] == REASON_PREDICTED else float(lines.reduced_width[i]))
                if strength
                else nan
            )
            threshold = (low if value < low else high) if strength else nan
            entries.append(("line_cut", subject, value, threshold, "left out", str(lines.reason[i])))
    first = len(ranking.decisions)
    return ranking.decisions + tuple(
        Decision(
            step=first + k, kind=kind, subject=subject, value=value, threshold=threshold, outcome=outcome, reason=reason
        )
        for k, (kind, subject, value, threshold, outcome, reason) in enumerate(entries, start=1)
    )
