"""Equivalent widths as 16-bit codes: log10(W/lambda) from -9 in steps of 1e-4 dex."""

from __future__ import annotations

import numpy as np

CODE_TYPE = np.dtype("<u2")
FIRST_LOG_WIDTH = -9.0  # log10(W/lambda) of code 0
STEP = 1e-4  # dex; rounding errs by at most half of it, rms 3e-5 dex
MISSING = 65535  # the one code that is no width
CENTRE = 40000.0  # code of log10(W/lambda) = -5; sums are kept relative to it
LAST_LOG_WIDTH = FIRST_LOG_WIDTH + STEP * (MISSING - 1)


def encode(log_reduced_widths: np.ndarray) -> np.ndarray:
    """Codes of log10(W/lambda); nan and whatever lies outside -9 .. -2.4466 become `MISSING`.

    Examples
    --------
    >>> encode(np.array([-9.0, -5.0, np.nan])).tolist()
    [0, 40000, 65535]
    """
    code = np.rint((np.asarray(log_reduced_widths, dtype=np.float64) - FIRST_LOG_WIDTH) / STEP)
    inside = (code >= 0) & (code < MISSING)  # false for nan
    return np.where(inside, code, MISSING).astype(CODE_TYPE)


def decode(codes: np.ndarray) -> np.ndarray:
    """log10(W/lambda) of codes, nan where missing."""
    codes = np.asarray(codes)
    log_widths = codes * STEP + FIRST_LOG_WIDTH
    log_widths[codes == MISSING] = np.nan
    return log_widths
