"""Widths of the packaged lines by the full engine, on atmospheres converged between the nodes of the store.

They are the truths of the coverage tests: 200 random atmospheres, seven abundances about each, so that errors of log gf can be
laid on afterwards. Kept in ``tests/data/off_node_widths.npz`` (codes of the response grid's encoding);
``python -m tests.integration.full_engine`` remakes the file in a minute. A test computes some of them anew.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from functools import cached_property, lru_cache
from pathlib import Path

import numpy as np
from scipy.interpolate import CubicSpline

from specsolve.constants import SOLAR_IRON
from specsolve.grid.codes import decode, encode
from specsolve.grid.store import ResponseGrid
from tests.integration.off_node import RANDOM, OffNode, load

DATA = Path(__file__).resolve().parents[1] / "data" / "off_node_widths.npz"
OFFSETS = np.linspace(-0.6, 0.6, 7)  # dex about A(Fe) of the star


@dataclass(frozen=True, eq=False)
class Engine:
    """One atmosphere with its widths.

    Attributes
    ----------
    theta : ndarray, shape (4,)
        teff, logg, mh, vmic.
    log_widths : ndarray, shape (n_lines, n_offsets)
        log10(W/lambda); nan where missing.
    """

    theta: np.ndarray
    log_widths: np.ndarray

    def widths(self, abundance: np.ndarray) -> np.ndarray:
        """log10(W/lambda) of each line at its own A(Fe); nan beyond the offsets."""
        offset = np.asarray(abundance) - SOLAR_IRON - self.theta[2]
        cell = np.clip(np.searchsorted(OFFSETS, offset) - 1, 0, OFFSETS.size - 2)
        lines = np.arange(offset.size)
        cubic = self._curves[:, cell, lines]
        values = np.polynomial.polynomial.polyval(offset - OFFSETS[cell], cubic[::-1], tensor=False)
        return np.where(np.abs(offset) <= OFFSETS[-1], values, np.nan)

    @cached_property
    def _curves(self) -> np.ndarray:
        """Coefficients of the splines, shape (4, n_cells, n_lines); nan for lines with a missing width."""
        known = np.isfinite(self.log_widths).all(axis=1)
        found = CubicSpline(OFFSETS, np.where(known[:, None], self.log_widths, 0.0), axis=1).c
        return np.where(known, found, np.nan)


def models() -> list[OffNode]:
    """The random atmospheres that converged."""
    return [item for item in load() if item.kind == RANDOM and item.model.status == "converged"]


def compute(item: OffNode, lines) -> np.ndarray:
    """Widths of one atmosphere by the full engine, shape (n_lines, n_offsets)."""
    from specsolve.grid.engine import lte_widths

    return lte_widths(item.model, lines, np.array([item.vmic]), OFFSETS)[:, 0, :]


@lru_cache
def engines() -> tuple[Engine, ...]:
    """All of the data file."""
    with np.load(DATA, allow_pickle=False) as stored:
        codes, thetas, keys = stored["codes"], stored["theta"], stored["keys"]
    here = ResponseGrid.packaged().lines.key
    if list(keys) != list(here):
        raise RuntimeError("the packaged line list has changed: python -m tests.integration.full_engine")
    return tuple(Engine(theta, value) for theta, value in zip(thetas, decode(codes), strict=True))


def main() -> None:
    """Remake the data file."""
    lines = ResponseGrid.packaged().lines
    chosen = models()
    codes = np.array([encode(compute(item, lines)) for item in chosen])
    with DATA.open("wb") as stream:
        np.savez_compressed(
            stream, codes=codes, theta=np.array([item.theta for item in chosen]), keys=np.asarray(lines.key, dtype=str)
        )
    print(f"{len(chosen)} atmospheres, {DATA.stat().st_size / 1e6:.2f} MB", file=sys.stderr)


if __name__ == "__main__":
    main()
