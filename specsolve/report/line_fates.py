"""What became of each line, in words: cuts by the rule together, everything that needs an eye one by one."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from specsolve.balance.solution import Solution

CUT_ENDING = "_cut"


def cut_by_rule(one: Solution) -> np.ndarray:
    """Mask of the lines that a stated cut (strength, grade, wavelength, ...) left out.

    Returns
    -------
    ndarray of bool, shape (n_lines,)
    """
    return ~one.lines.used & np.char.endswith(one.lines.reason.astype(str), CUT_ENDING)


def worth_a_look(one: Solution) -> np.ndarray:
    """Indices of the lines that were dropped for a reason of their own or down-weighted, the worst first.

    Dropped lines come first, by wavelength, then the down-weighted ones by weight.
    """
    lines = one.lines
    gone = np.flatnonzero(~lines.used & ~cut_by_rule(one))
    weak = np.flatnonzero(lines.used & (lines.reason != ""))
    return np.concatenate([gone[np.argsort(lines.wavelength_air[gone])], weak[np.argsort(lines.robust_weight[weak])]])


def cut_counts(one: Solution) -> str:
    """The cuts with the number of lines each took, the largest first; empty if none took any.

    Examples
    --------
    >>> cut_counts(solution)  # doctest: +SKIP
    '44 grade cut, 12 predicted strength cut'
    """
    counted = Counter(one.lines.reason[cut_by_rule(one)].tolist())
    return ", ".join(f"{number} {words(reason)}" for reason, number in counted.most_common())


def fate(one: Solution, i: int) -> str:
    """What became of one line and why."""
    what = f"weight {one.lines.robust_weight[i]:.2f}" if one.lines.used[i] else "dropped"
    why = words(str(one.lines.reason[i]))
    if one.lines.used[i] and np.isfinite(one.lines.standardized[i]):
        return f"{what}: {one.lines.deviation[i]:+.2f} dex, {one.lines.standardized[i]:+.1f} of its error"
    return f"{what}: {why}"


def words(reason: str) -> str:
    """A reason without underscores.

    Examples
    --------
    >>> words("predicted_strength_cut")
    'predicted strength cut'
    """
    return reason.replace("_", " ")
