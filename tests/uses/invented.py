"""Invented responses in two line formations, invented stars, and invented analyses of them with a cause put in."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np

from specsolve.balance.options import Options
from specsolve.balance.problem import Problem
from specsolve.balance.star import Star
from specsolve.constants import SOLAR_IRON
from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC, UNITS, Axis
from specsolve.grid.codes import MISSING, encode
from specsolve.grid.interpolate import Interpolator
from specsolve.grid.store import ResponseGrid
from specsolve.grid.write import write_grid
from specsolve.uses.counterfactuals import Case, changed, vector
from specsolve.uses.local import Point, point_at, solve_near
from tests.grid.synthetic import synthetic_lines, synthetic_log_widths

TEFF, LOGG, MH = np.arange(4500.0, 6501.0, 250.0), np.arange(2.0, 5.01, 0.5), np.arange(-2.5, 0.51, 0.5)
LEFT_OUT = ((6500.0, 2.0, 0.5),)  # a missing node, for what must not be bridged
WIDTH_NOISE = 0.03  # of every width
GF_ERROR = 0.05  # dex; that of the synthetic lines
USABLE = (-5.95, -4.85)


def departure(lines, teff, logg, mh):
    """Invented abundance correction of Fe I beyond LTE [dex]: grows with teff, falling gravity and metallicity."""
    size = 0.09 * (4.8 - logg) * (0.4 - mh) * (teff / 5500.0) ** 2
    return np.where(lines.ion == "Fe I", size[..., None] * (1.0 - 0.06 * lines.excitation_potential), 0.0)


def two_treatments(folder: Path, *, missing: tuple = LEFT_OUT, n_fe1: int = 50, n_fe2: int = 12) -> ResponseGrid:
    """A grid of the synthetic formulas with treatments lte and nlte, both invented."""
    lines = synthetic_lines(n_fe1, n_fe2, seed=5)
    axes = {"teff": TEFF, "logg": LOGG, "mh": MH, "vmic": DEFAULT_VMIC, "dA": DEFAULT_DA}
    mesh = np.meshgrid(*[np.asarray(v, float) for v in axes.values()], indexing="ij")
    correction = departure(lines, *mesh[:3])
    codes, reasons = {}, {}
    for treatment, shift in (("lte", 0.0), ("nlte", 1.0)):
        one = np.empty((*mesh[0].shape, len(lines)))
        for k in range(len(lines)):
            single = lines.select(np.array([k]))
            one[..., k] = synthetic_log_widths(single, *mesh[:4], mesh[4] - shift * correction[..., k])[..., 0]
        codes[treatment] = encode(np.moveaxis(one, -1, 3))
        reasons[treatment] = {}
        for node in np.ndindex(codes[treatment].shape[:3]):
            at = (TEFF[node[0]], LOGG[node[1]], MH[node[2]])
            if at in missing:
                codes[treatment][node] = MISSING
                reasons[treatment][node] = "left out of the invented grid"
    write_grid(
        folder / "invented_grid",
        codes,
        lines,
        node_axes=[Axis(n, UNITS[n], axes[n]) for n in ("teff", "logg", "mh")],
        line_axes=[Axis(n, UNITS[n], axes[n]) for n in ("vmic", "dA")],
        missing=reasons,
        atmospheres_identity="0" * 64,
        description="Invented responses for tests, in two line formations",
    )
    return ResponseGrid.open(folder / "invented_grid")


def draw_theta(rng: np.random.Generator, metal_poor: bool = False) -> np.ndarray:
    """Parameters of an invented star: a dwarf, a subgiant or a giant."""
    kind = rng.integers(1 if metal_poor else 0, 3)  # metal-poor dwarfs have too few of these lines
    teff, logg = ((5900.0, 4.35), (5500.0, 3.7), (4900.0, 2.6))[kind]
    feh = rng.uniform(-1.3, -0.6) if metal_poor else rng.uniform(-0.3, 0.2)
    vmic = (1.1, 1.2, 1.5)[kind]
    return np.array(
        [teff + rng.uniform(-250, 250), logg + rng.uniform(-0.25, 0.25), feh, vmic + rng.uniform(-0.2, 0.2)]
    )


def widths_of(grid, treatment: str, theta: np.ndarray, gf_error: np.ndarray) -> np.ndarray:
    """Noise-free log10(W/lambda) of all lines when log gf of the list are wrong by gf_error."""
    return Interpolator(grid, treatment).widths(theta, np.full(len(grid.lines), SOLAR_IRON + theta[2]) + gf_error)


def observed(grid, name: str, log_w: np.ndarray, rng: np.random.Generator, noise: float = WIDTH_NOISE) -> Star:
    """A star with noise on its widths."""
    lines = grid.lines
    keep = np.isfinite(log_w) & (log_w > USABLE[0]) & (log_w < USABLE[1])
    width = lines.wavelength_air[keep] * 1e3 * 10.0 ** log_w[keep]
    return Star.from_arrays(
        name,
        lines.wavelength_air[keep],
        lines.ion[keep],
        width * (1.0 + noise * rng.standard_normal(keep.sum())),
        noise * width,
        excitation_potential=lines.excitation_potential[keep],
    )


def solved_problem(
    grid, star: Star, theta: np.ndarray, treatment: str = "lte", compiled: bool = True
) -> tuple[Problem, Point]:
    """The problem of a star and its solution near the truth."""
    problem = Problem(star=star, grid=grid, treatment=treatment, options=Options(), compiled=compiled)
    return problem, solve_near(problem, theta)


MOST_ATTEMPTS = 60
SIZE = 3.0  # errors of one star's difference that an injected cause amounts to, at least


def invented_set(
    grid, rng: np.random.Generator, causes: tuple[str, ...] = (), n_stars: int = 10, size: float = SIZE
) -> tuple[list[Case], dict[str, float]]:
    """A set of stars analysed twice from independent spectra, the second time with causes at work.

    Held gravities are wrong by independent errors of `size` times the error of the gravity; a shift of a scale, and of
    solar iron, is such that it moves the parameter that it moves most by `size` errors in the median star.
    """
    gf_error = rng.normal(0.0, GF_ERROR, len(grid.lines))
    ours: list[Case] = []
    second: list[Case] = []
    for _ in range(MOST_ATTEMPTS):
        if len(ours) == n_stars:
            break
        theta = draw_theta(rng, metal_poor="treatment" in causes)
        log_w = widths_of(grid, "lte", theta, gf_error)
        name = f"invented {len(ours) + 1}"
        pair = [solved_problem(grid, observed(grid, name, log_w, rng), theta) for _ in range(2)]
        if all(np.isfinite(point.cov_star).all() and point.state is not None for _, point in pair):
            errors = np.sqrt(np.diag(pair[1][1].cov_star))
            first, other = (Case(name, name, *one, pair[1][1].theta.copy(), errors) for one in pair)
            ours.append(first)
            second.append(other)
    amounts: dict[str, float] = {}
    sign = rng.choice([-1.0, 1.0])
    for cause in causes:
        if cause in ("fe2_scale", "zero_point"):
            lever = [np.max(np.abs(vector(c, cause)) / np.sqrt(2.0 * np.diag(c.point.cov_star))) for c in second]
            amounts[cause] = float(sign * size / np.nanmedian(lever))
    out = []
    for case, other in zip(ours, second, strict=True):
        acting = dict(amounts)
        if "held_logg" in causes:
            error = np.sqrt(2.0 * case.point.cov_star[1, 1])
            acting["held_logg"] = other.point.theta[1] + size * error * rng.choice([-1.0, 1.0]) * rng.uniform(1.0, 1.5)
        if "treatment" in causes:
            acting["treatment"] = 1.0
        found = solve_near(changed(other, acting), other.point.theta) if acting else other.point
        if found.known:
            out.append(dataclasses.replace(case, theirs=found.theta.copy()))
    return out, amounts


__all__ = ["draw_theta", "invented_set", "observed", "point_at", "solved_problem", "two_treatments", "widths_of"]
