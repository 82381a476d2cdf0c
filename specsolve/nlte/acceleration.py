"""Acceleration of a linearly converging sequence.

Ng 1974, J. Chem. Phys. 61, 2680; Olson, Auer & Buchler 1986, JQSRT 35, 431."""

from __future__ import annotations

import numpy as np

#: Plain iterations before the first extrapolation and between two.
FIRST, PERIOD = 5, 4
#: An extrapolation that moves any ln b by more than this is not taken.
LARGEST_MOVE = 0.5


class History:
    """The last iterates; gives the next, from time to time extrapolated.

    Examples
    --------
    >>> history, x = History(), np.array([1.0])
    >>> for _ in range(5):
    ...     x = history.accelerated(0.5 * x)
    >>> bool(abs(x[0]) < 1e-6)
    True
    """

    def __init__(self) -> None:
        self._kept: list[np.ndarray] = []
        self._count = 0

    def accelerated(self, new: np.ndarray) -> np.ndarray:
        """The given iterate, or the extrapolation from the last four."""
        self._kept.append(new)
        self._count += 1
        if self._count < FIRST or (self._count - FIRST) % PERIOD or len(self._kept) < 4:
            self._kept = self._kept[-4:]
            return new
        oldest, older, old, newest = self._kept[-4:]
        self._kept = []
        q0 = newest - old
        q1 = q0 - (old - older)
        q2 = q0 - (older - oldest)
        a = np.array([[np.sum(q1 * q1), np.sum(q1 * q2)], [np.sum(q1 * q2), np.sum(q2 * q2)]])
        right = np.array([np.sum(q0 * q1), np.sum(q0 * q2)])
        x, y = np.linalg.lstsq(a, right, rcond=1e-10)[0]
        extrapolated = (1.0 - x - y) * newest + x * old + y * older
        if not np.all(np.isfinite(extrapolated)) or np.max(np.abs(extrapolated - newest)) > LARGEST_MOVE:
            return newest
        return extrapolated
