"""Stars that are ambiguous by construction: an invented grid on which two temperatures give almost the same widths.

The responses are those of `tests.grid.synthetic` at a temperature ``u = TOP - DEPTH x^2``, ``x = (teff - CENTRE) / WIDTH``, so
that every star has a twin at the other side of the centre. What tells both apart is small: each line's width has a
term of its own that is odd in x, so that the twin's lines scatter more; and the microturbulence that the lines show
is shifted by an odd term, so that the twin's differs from what is usual.
"""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np

from specsolve.balance.relations import vmic_relation
from specsolve.balance.star import Star
from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC, UNITS, Axis
from specsolve.grid.codes import encode
from specsolve.grid.store import ResponseGrid
from specsolve.grid.write import write_grid
from specsolve.lines import LineList
from tests.grid.synthetic import synthetic_lines, synthetic_log_widths

CENTRE, WIDTH = 5800.0, 700.0  # K
TOP, DEPTH = 5900.0, 900.0  # K
ODD_TERM_DEX = 0.035  # rms over lines at x = 1
VMIC_SHIFT = 0.25  # km/s at x = 1
TEFF = np.arange(5050.0, 6551.0, 125.0)
LOGG = np.arange(3.0, 5.01, 0.5)
MH = np.arange(-1.0, 0.51, 0.5)
GF_ERROR, NOISE, SCATTER = 0.06, (0.04, 0.12), 0.03
N_FE1, N_FE2 = 26, 8


def folded_widths(lines: LineList, odd: np.ndarray, teff, logg, mh, vmic, dA) -> np.ndarray:
    """log10(W/lambda), parameters broadcast against a last axis of lines."""
    x = (np.asarray(teff, float) - CENTRE) / WIDTH
    seen = np.maximum(np.asarray(vmic) + VMIC_SHIFT * x, 0.0)
    return synthetic_log_widths(lines, TOP - DEPTH * x**2, logg, mh, seen, dA) + odd * x[..., None]


def folded_grid(folder: Path, seed: int = 7) -> tuple[ResponseGrid, np.ndarray]:
    """The grid, and the odd term of each line [dex]."""
    lines = synthetic_lines(N_FE1, N_FE2, seed=seed)
    odd = ODD_TERM_DEX * np.random.default_rng(seed).normal(size=len(lines))
    axes = {"teff": TEFF, "logg": LOGG, "mh": MH, "vmic": DEFAULT_VMIC, "dA": DEFAULT_DA}
    values = [np.asarray(v, dtype=np.float64) for v in axes.values()]
    widths = folded_widths(lines, odd, *np.meshgrid(*values, indexing="ij"))
    write_grid(
        Path(folder) / "folded",
        {"lte": encode(np.moveaxis(widths, -1, 3))},
        lines,
        node_axes=[Axis(n, UNITS[n], axes[n]) for n in ("teff", "logg", "mh")],
        line_axes=[Axis(n, UNITS[n], axes[n]) for n in ("vmic", "dA")],
        missing={"lte": {}},
        atmospheres_identity="0" * 64,
        description="Invented responses that fold the temperature",
    )
    return ResponseGrid.open(Path(folder) / "folded"), odd


def folded_star(
    grid: ResponseGrid, odd: np.ndarray, rng: np.random.Generator, name: str, teff: float | None = None
) -> tuple[Star, np.ndarray]:
    """A star and its truth: teff, logg, feh flat, vmic about the published relation with its scatter."""
    lines = grid.lines
    teff = rng.uniform(5100.0, 6500.0) if teff is None else teff
    logg, feh = rng.uniform(3.6, 4.6), rng.uniform(-0.7, 0.3)
    relation = vmic_relation(teff, logg)
    vmic = max(rng.normal(relation.vmic, relation.sigma), 0.1)
    offset = np.hypot(GF_ERROR, SCATTER) * rng.normal(size=len(lines))
    true_lines = dataclasses.replace(lines, log_gf=lines.log_gf + offset)
    log_w = folded_widths(true_lines, odd, teff, logg, feh, vmic, 0.0)
    width = lines.wavelength_air * 1e3 * 10.0**log_w
    error = np.hypot(rng.uniform(*NOISE) * width, 1.0)
    observed = np.maximum(width + error * rng.normal(size=width.size), 0.5)
    star = Star.from_arrays(
        name, lines.wavelength_air, lines.ion, observed, error, excitation_potential=lines.excitation_potential,
        log_gf_error=np.full(len(lines), GF_ERROR), log_gf=lines.log_gf,
    )  # fmt: skip
    return star, np.array([teff, logg, feh, vmic])
