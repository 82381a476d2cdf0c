"""The second exponential integral E2, which weighs the source function in the emergent flux, from a table.

Flux of a plane-parallel atmosphere: F = 2 pi * integral of S(t) E2(t) dt. The table holds parabolas on 32 pieces of
every octave of t; the piece is read off the bits of the number, so that no logarithm is needed.
"""

from __future__ import annotations

from functools import cache

import numpy as np

PIECES_BITS = 5  # 32 pieces an octave
LOWEST_OCTAVE, HIGHEST_OCTAVE = -40, 6  # t from 9e-13 to 64
SHIFT = 52 - PIECES_BITS
OFFSET = (1023 + LOWEST_OCTAVE) << PIECES_BITS
N_PIECES = (HIGHEST_OCTAVE - LOWEST_OCTAVE) << PIECES_BITS


@cache
def table() -> np.ndarray:
    """Coefficients (n_pieces, 3): E2(t) = c0 + t (c1 + t c2) for t of piece (bits >> SHIFT) - OFFSET.

    Below the lowest octave E2 is 1 to 3e-11; beyond the highest it is 0 to 1e-29: the first and the last piece say so.

    Examples
    --------
    >>> table().shape
    (1472, 3)
    """
    from scipy.special import expn

    coefficients = np.empty((N_PIECES, 3))
    pieces = np.arange(N_PIECES)
    octave, part = LOWEST_OCTAVE + (pieces >> PIECES_BITS), pieces % (1 << PIECES_BITS)
    width = 2.0**octave / (1 << PIECES_BITS)
    left = 2.0**octave + part * width
    ends = [expn(2, left), expn(2, left + 0.5 * width), expn(2, left + width)]
    second = 2.0 * (ends[0] - 2.0 * ends[1] + ends[2]) / width**2
    first = (ends[2] - ends[0]) / width - second * (2.0 * left + width)
    coefficients[:, 2] = second
    coefficients[:, 1] = first
    coefficients[:, 0] = ends[0] - left * (first + left * second)
    coefficients[0] = (1.0, 0.0, 0.0)
    coefficients[-1] = 0.0
    coefficients.flags.writeable = False
    return coefficients
