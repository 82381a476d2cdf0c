"""Statistical equilibrium of a model atom in a model atmosphere: multi-level accelerated lambda iteration.

Rybicki & Hummer 1991, A&A 245, 171, with the diagonal of the lambda operator, in departure coefficients; acceleration of
Ng (1974, J. Chem. Phys. 61, 2680) in ln b. Photoionization and background do not depend on the departures.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.atmosphere.model import Atmosphere
from specsolve.constants import LIGHT_SPEED_CM_S, PLANCK_ERG_S, RADIATION_C2_CM_K
from specsolve.matter.composition import ELEMENTS, Composition
from specsolve.matter.equation_of_state import Gas, equilibrium
from specsolve.nlte.acceleration import History
from specsolve.nlte.atom import ModelAtom
from specsolve.nlte.background import Background, backgrounds
from specsolve.nlte.collisions import LINE_CROSS_SECTION, collision_flows
from specsolve.nlte.line_grid import doppler_width, line_grid
from specsolve.nlte.line_transfer import line_fields
from specsolve.nlte.photoionization import photoionization_flows, photoionization_grid
from specsolve.nlte.populations import lte_populations
from specsolve.nlte.rates import add_lines, fixed_equations, solve_populations, spontaneous
from specsolve.nlte.recipe import Recipe
from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS

#: Largest |d ln b| of the last iteration.
CONVERGED = 1e-4
MOST_ITERATIONS = 120
#: A line whose opacity stays below this fraction of the background everywhere does not change the radiation field.
THIN = 3e-2
#: Displacements [Doppler widths] of the wavelengths at which the background of a line is sampled: outside its own core.
BACKGROUND_OFFSETS = (-9.0, 9.0)
#: Lines outside [cm] count as in detailed balance: below, optically thick lines of Fe II; above, between near-equal levels.
SHORTEST_CM, LONGEST_CM = 1265e-8, 90e-4


@dataclass(frozen=True, kw_only=True)
class Medium:
    """What a model atom meets in an atmosphere, whatever the recipe of its rates: n depths.

    Attributes
    ----------
    gas : Gas
    column_mass, log_tau : ndarray, shape (n,)
    vmic : float
        [km/s]
    lte : ndarray, shape (n_levels, n)
        LTE populations [cm^-3].
    field : Background
        On the grid of photoionization.
    lines : ndarray of int, shape (m,)
        Lines that take part, those with transfer first.
    n_transfer : int
        How many of them need their own transfer.
    coefficient, boltzmann, strength, opacity, source, mean : ndarray, shape (m, n)
        See `rates.add_lines` and `line_transfer.line_fields`; background opacity, source function and mean intensity.
    emission : ndarray, shape (m,)
    profile, quadrature : ndarray, shape (n_transfer, n, q)
    """

    gas: Gas
    column_mass: np.ndarray
    log_tau: np.ndarray
    vmic: float
    lte: np.ndarray
    field: Background
    lines: np.ndarray
    n_transfer: int
    coefficient: np.ndarray
    boltzmann: np.ndarray
    strength: np.ndarray
    opacity: np.ndarray
    source: np.ndarray
    mean: np.ndarray
    emission: np.ndarray
    profile: np.ndarray
    quadrature: np.ndarray


@dataclass(frozen=True, kw_only=True)
class Departures:
    """Departure coefficients of all levels.

    Attributes
    ----------
    log_b : ndarray, shape (n_levels, n)
        Natural logarithm of n / n_LTE; `nan` if failed.
    column_mass, log_tau : ndarray, shape (n,)
        [g/cm2]; log10 of continuum optical depth at 5000 A.
    converged : bool
    iterations : int
    change : float
        Largest |d ln b| of the last iteration.
    reason : str
        Why it failed; empty otherwise.
    """

    log_b: np.ndarray
    column_mass: np.ndarray
    log_tau: np.ndarray
    converged: bool
    iterations: int
    change: float
    reason: str = ""


def medium(atmosphere: Atmosphere, composition: Composition, atom: ModelAtom, uv_residual: float = 1.0) -> Medium:
    """Prepare the iteration: populations, background radiation, profiles.

    Parameters
    ----------
    atmosphere : Atmosphere
    composition : Composition
    atom : ModelAtom
    uv_residual : float
        See `Recipe`.
    """
    gas = equilibrium(atmosphere.temperature, atmosphere.gas_pressure, composition)
    temperature, column_mass = gas.temperature, atmosphere.column_mass
    iron = composition.abundances[ELEMENTS.index("Fe")] * gas.hydrogen_density
    lte = lte_populations(atom, temperature, gas.electron_density, iron)

    lines = np.flatnonzero((atom.line_wavelength_cm > SHORTEST_CM) & (atom.line_wavelength_cm < LONGEST_CM))
    reference = int(np.argmin(np.abs(atmosphere.log_tau + 1.0)))
    shift = doppler_width(atom, temperature[reference : reference + 1], atmosphere.vmic)[0] / LIGHT_SPEED_CM_S
    wavelength = atom.line_wavelength_cm[lines]
    beside = wavelength * (1.0 + shift * np.array(BACKGROUND_OFFSETS)[:, None])
    grid_cm = photoionization_grid()
    field, at_lines = backgrounds(grid_cm, beside, gas, column_mass, atmosphere.vmic, uv_residual)
    opacity, source, mean = at_lines.opacity, at_lines.source, at_lines.mean

    population = lte[atom.line_lower[lines]]
    cross_section = LINE_CROSS_SECTION * atom.line_f[lines][:, None] * population
    boltzmann = np.exp(-RADIATION_C2_CM_K / (wavelength[:, None] * temperature))
    coefficient = 4.0 * np.pi / (PLANCK_ERG_S * LIGHT_SPEED_CM_S) * wavelength[:, None] * cross_section
    strength = cross_section / atom.line_n_effective[lines][:, None] / gas.density
    hertz = doppler_width(atom, temperature, atmosphere.vmic) / wavelength[:, None]
    ratio = (strength * (1.0 - boltzmann) / hertz / opacity).max(axis=1)
    first = np.argsort(ratio < THIN, kind="stable")
    n_transfer = int(np.count_nonzero(ratio >= THIN))
    grid = line_grid(atom, gas, atmosphere.vmic, lines[first[:n_transfer]], ratio[first[:n_transfer]], reference)
    return Medium(
        gas=gas,
        column_mass=column_mass,
        log_tau=atmosphere.log_tau,
        vmic=atmosphere.vmic,
        lte=lte,
        field=field,
        lines=lines[first],
        n_transfer=n_transfer,
        coefficient=coefficient[first],
        boltzmann=boltzmann[first],
        strength=strength[first],
        opacity=opacity[first],
        source=source[first],
        mean=mean[first],
        emission=spontaneous(wavelength[first]),
        profile=grid.profile,
        quadrature=grid.quadrature,
    )


def solve_equilibrium(
    atmosphere: Atmosphere,
    composition: Composition,
    atom: ModelAtom,
    recipe: Recipe | None = None,
    start: Departures | None = None,
) -> Departures:
    """Departure coefficients of an atmosphere.

    Parameters
    ----------
    atmosphere : Atmosphere
    composition : Composition
    atom : ModelAtom
    recipe : Recipe, optional
        The frozen one if not given.
    start : Departures, optional
        Of a neighbouring atmosphere and the same atom.
    """
    recipe = recipe or Recipe()
    return iterate(medium(atmosphere, composition, atom, recipe.uv_residual), atom, recipe, start)


def iterate(
    surroundings: Medium, atom: ModelAtom, recipe: Recipe, start: Departures | None = None, tolerance: float = CONVERGED
) -> Departures:
    """The iteration itself, in a prepared medium.

    Parameters
    ----------
    surroundings : Medium
    atom : ModelAtom
        The one of the medium.
    recipe : Recipe
        Its `uv_residual` is that of the medium already.
    start : Departures, optional
    tolerance : float
        On |d ln b|.
    """
    s = surroundings
    collisions = collision_flows(atom, s.gas, s.lte, recipe)
    ionization, recombination = photoionization_flows(
        atom, s.field, s.gas.temperature, s.lte, recipe.photoionization_factor
    )
    fixed = fixed_equations(collisions, atom.continuum_level, atom.continuum_target, ionization, recombination)
    low, up = atom.line_lower[s.lines], atom.line_upper[s.lines]
    thin = slice(s.n_transfer, None)
    nothing = np.zeros_like(s.mean[thin])
    add_lines(
        fixed, low[thin], up[thin], s.coefficient[thin], s.boltzmann[thin], s.emission[thin], s.mean[thin], nothing
    )
    log_b = np.zeros_like(s.lte) if start is None else _remapped(start, s.log_tau)
    return lambda_iteration(s, low, up, fixed, log_b, tolerance)


def lambda_iteration(
    surroundings: Medium,
    low: np.ndarray,
    up: np.ndarray,
    fixed: np.ndarray,
    log_b: np.ndarray,
    tolerance: float,
    most: int = MOST_ITERATIONS,
) -> Departures:
    """Iterate until the populations no longer change.

    Parameters
    ----------
    surroundings : Medium
    low, up : ndarray of int, shape (m,)
        Levels of its lines.
    fixed : ndarray, shape (n, n_levels, n_levels)
        Equations of all that does not change, see `rates.fixed_equations`.
    log_b : ndarray, shape (n_levels, n)
        First guess.
    tolerance : float
        On |d ln b|.
    most : int
        Iterations after which it is given up.
    """
    s = surroundings
    thick = slice(0, s.n_transfer)
    low, up = low[thick], up[thick]
    effective, diagonal = np.empty_like(s.mean[thick]), np.empty_like(s.mean[thick])
    history = History()
    change = np.inf
    for iteration in range(1, most + 1):
        line_fields(
            low, up, log_b, s.strength[thick], s.boltzmann[thick], s.emission[thick], s.opacity[thick],
            s.source[thick], s.profile, s.quadrature, s.column_mass, ANGLE_COSINES, ANGLE_WEIGHTS, effective, diagonal,
        )  # fmt: skip
        matrix = fixed.copy()
        add_lines(matrix, low, up, s.coefficient[thick], s.boltzmann[thick], s.emission[thick], effective, diagonal)
        b = solve_populations(matrix, s.lte)
        if not np.all(np.isfinite(b)) or np.any(b <= 0.0):
            return _result(s, np.full_like(log_b, np.nan), False, iteration, change, "populations not positive")
        new = np.log(b)
        change = float(np.max(np.abs(new - log_b)))
        if change < tolerance:
            return _result(s, new, True, iteration, change, "")
        log_b = history.accelerated(new)
    reason = f"not converged after {most} iterations: populations still change by {change:.1e}"
    return _result(s, np.full_like(log_b, np.nan), False, most, change, reason)


def _result(s: Medium, log_b, converged: bool, iterations: int, change: float, reason: str) -> Departures:
    return Departures(
        log_b=log_b,
        column_mass=s.column_mass,
        log_tau=s.log_tau,
        converged=converged,
        iterations=iterations,
        change=change,
        reason=reason,
    )


def _remapped(start: Departures, log_tau: np.ndarray) -> np.ndarray:
    """ln b of a neighbour on another optical depth scale; held at its ends, as a first guess may be."""
    return np.array([np.interp(log_tau, start.log_tau, row) for row in start.log_b])
