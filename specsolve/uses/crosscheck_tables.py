"""What a cross-check writes: a row a star, a cause, a parameter of the set, and a verdict."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.balance.solution import PARAMETER_NAMES, RESIDUAL_NAMES
from specsolve.report.tables import make_table
from specsolve.schema import columns_of
from specsolve.schema_uses import CAUSES

from .causes import HELD, SCALE
from .counterfactuals import HELD_NAMES, SCALE_STEP, Case, Shares, amount_of, applicable, solved_with
from .set_statistics import location, trend
from .significance import in_sigma, whole_difference

if TYPE_CHECKING:
    from astropy.table import Table

    from .crosscheck import SetComparison


def make_tables(sets: Mapping[str, SetComparison], same_lines: bool, provenance: Mapping[str, Any]) -> dict[str, Table]:
    """The four tables."""
    rows: dict[str, list[dict[str, Any]]] = {
        "crosscheck": [], "crosscheck_causes": [], "crosscheck_set": [], "crosscheck_verdicts": []
    }  # fmt: skip
    for treatment, one in sets.items():
        for i in range(len(one.cases)):
            rows["crosscheck"].append(_star_row(one, i, same_lines))
            rows["crosscheck_causes"] += _cause_rows(one, i)
        rows["crosscheck_set"] += _set_rows(treatment, one, same_lines)
        rows["crosscheck_verdicts"] += _verdict_rows(treatment, one)
    return {
        kind: make_table(kind, {c.name: [row[c.name] for row in found] for c in columns_of(kind)}, provenance)
        for kind, found in rows.items()
    }


def _four(template: str, values: np.ndarray) -> dict[str, float]:
    return {template.format(name): float(value) for name, value in zip(PARAMETER_NAMES, values, strict=True)}


def _star_row(one: SetComparison, i: int, same_lines: bool) -> dict[str, Any]:
    case, share, balance = one.cases[i], one.shares[i], one.balances[i]
    star = case.covariance_star
    total = star if same_lines else star + case.point.cov_list
    chi2, freedom = whole_difference(case.difference, total)
    left, left_freedom = whole_difference(share.remainder, _remainder_covariance(case, share, total))
    row = {
        "star": case.name,
        "treatment": case.problem.treatment,
        "published_star": case.published_name,
        "status": "compared" if np.isfinite(balance.chi2) else "compared; their parameters lie outside the grid",
        "difference_chi2": chi2,
        "difference_freedom": freedom,
        "significance": in_sigma(chi2, freedom),
        "significance_star": in_sigma(*whole_difference(case.difference, star)),
        "balance_significance": in_sigma(balance.chi2, balance.freedom),
        "broken": RESIDUAL_NAMES[int(np.nanargmax(np.abs(balance.sigmas)))] if balance.freedom else "",
        "causes": ", ".join(one.named),
        "remainder_significance": in_sigma(left, left_freedom),
    }
    row |= _four("{}", case.point.theta) | _four("published_{}", case.theirs) | _four("d_{}", case.difference)
    row |= _four("d_{}_error", np.sqrt(np.diag(total))) | _four("remainder_{}", share.remainder)
    for name, value, sigma in zip(RESIDUAL_NAMES, balance.residuals, balance.sigmas, strict=True):
        row |= {f"their_{name}": float(value), f"their_{name}_sigma": float(sigma)}
    return row


def _remainder_covariance(case: Case, share: Shares, total: np.ndarray) -> np.ndarray:
    """Of the remainder: where causes held a parameter, that of the solve with it held; their errors added."""
    if not any(np.any(effect) for effect in share.share.values()) or not np.isfinite(share.point.cov_star).all():
        return total
    own = share.point.cov_star + (total - case.covariance_star)
    held = np.diag(share.point.cov_star) == 0.0
    own[held] = 0.0
    own[:, held] = 0.0
    errors = np.where(held, 0.0, np.nan_to_num(case.errors))
    return own + np.diag(errors**2)


def _cause_rows(one: SetComparison, i: int) -> list[dict[str, Any]]:
    case, rows = one.cases[i], []
    amplitudes = one.verdict.best.amplitudes
    for cause, vectors in one.differences.vectors.items():
        named = cause in one.named
        scale = 1.0
        amount = amount_of(case, cause, amplitudes)
        if one.differences.kinds[cause] == SCALE:
            amount = amount if named and np.isfinite(amount) else SCALE_STEP
            scale = amount
        elif one.differences.kinds[cause] == HELD:
            scale = case.difference[PARAMETER_NAMES.index(HELD_NAMES[cause])]
        alone = vectors[i] * scale
        share = one.shares[i]
        nothing = np.full(4, np.nan)
        rows.append(
            {
                "star": case.name,
                "treatment": case.problem.treatment,
                "cause": cause,
                "named": named,
                "amount": amount,
                "reason": "" if np.isfinite(alone).all() else _why_not(case, cause),
            }
            | _four("alone_{}", alone)
            | _four("share_{}", share.share.get(cause, nothing))
            | _four("order_{}", share.spread.get(cause, nothing))
        )
    return rows


def _why_not(case: Case, cause: str) -> str:
    if cause not in applicable(case):
        return "does not apply to this star"
    return solved_with(case, {cause: amount_of(case, cause, {})}).reason or "no solution with this cause"


def _set_rows(treatment: str, one: SetComparison, same_lines: bool) -> list[dict[str, Any]]:
    ours = np.array([case.point.theta for case in one.cases])
    theirs = np.array([case.theirs for case in one.cases])
    both = np.where(np.isfinite(theirs), 0.5 * (ours + theirs), ours)
    errors = np.sqrt([np.diag(case.covariance_star) for case in one.cases])
    remainder = np.array([share.remainder for share in one.shares])
    rows = []
    for quantity, values in (("difference", one.differences.values), ("remainder", remainder)):
        for k, name in enumerate(PARAMETER_NAMES):
            if quantity == "remainder" and f"held_{name}" in one.named:
                continue
            found = location(values[:, k], errors[:, k])
            shared = np.linalg.norm(one.modes[:, k].mean(axis=0)) if not same_lines else 0.0
            row = {
                "treatment": treatment, "parameter": name, "quantity": quantity, "n_stars": found.n,
                "zero_point": found.mean, "zero_point_error": found.error, "zero_point_error_list": float(shared),
                "scatter": found.scatter, "scatter_beyond": found.beyond,
            }  # fmt: skip
            for j, other in enumerate(PARAMETER_NAMES):
                slope, error = trend(both[:, j], values[:, k], errors[:, k])
                row |= {f"slope_{other}": slope, f"slope_{other}_error": error}
            rows.append(row)
    return rows


def _verdict_rows(treatment: str, one: SetComparison) -> list[dict[str, Any]]:
    best, nan = one.verdict.best, float("nan")
    rows = []

    def add(causes: Sequence[str], outcome: str, evidence: float, fit=best) -> None:
        single = causes[0] if len(causes) == 1 else ""
        rows.append(
            {
                "treatment": treatment,
                "cause": "+".join(causes),
                "outcome": outcome,
                "evidence": evidence,
                "amount": fit.amplitudes.get(single, nan),
                "amount_error": fit.errors.get(single, nan),
                "amount_scatter": fit.scatters.get(single, nan),
                "error_factor": fit.factor,
                "words": "; ".join(CAUSES[cause] for cause in causes) or "no cause is needed",
            }
        )

    for cause in best.causes:
        stated = cause in one.differences.stated
        add((cause,), "stated" if stated else "named", nan if stated else one.verdict.without[cause])
    if not best.causes:
        add((), "named", 0.0)
    for rival in one.verdict.rivals:
        add(rival.causes, "rival", best.criterion - rival.criterion, rival)
    for cause, evidence in one.verdict.tested.items():
        if cause not in best.causes:
            add((cause,), "not needed", evidence)
    for cause in CAUSES:
        if cause not in one.differences.kinds:
            add((cause,), "not tested", nan)
    return rows
