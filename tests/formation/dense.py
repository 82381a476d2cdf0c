"""Equivalent width the slow way: dense layers and profile, angle by angle, scattering solved at every frequency.

Nothing numerical is shared with `specsolve.formation`: other layers, optical depth by the trapezoidal rule, Feautrier's
equation on five angles at every profile point, plain trapezoidal profile out to the far wing.
"""

from __future__ import annotations

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.special import wofz

from specsolve.constants import ANGSTROM_CM, LIGHT_SPEED_CM_S
from specsolve.lines import air_to_vacuum
from specsolve.matter.broadening import doppler_width
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium
from specsolve.matter.line_opacity import damping_width, line_strength
from specsolve.radiation.planck import planck

NODES, WEIGHTS = np.polynomial.legendre.leggauss(5)
COSINES, WEIGHTS = 0.5 * (NODES + 1.0), 0.5 * WEIGHTS


def flux(chi, scattering, thermal, mass):
    """Emergent flux; chi, scattering and thermal emission (n,) per gram on layers of column mass (n,)."""
    steps = 0.5 * (chi[1:] + chi[:-1]) * np.diff(mass)
    depth = 0.5 * chi[0] * mass[0] + np.concatenate([[0.0], np.cumsum(steps)])
    albedo = scattering / chi
    source = thermal / chi / (1.0 - albedo)
    keep = depth < 60.0  # deeper layers are thermal and dark
    steps, depth, albedo, b = steps[: keep.sum() - 1], depth[keep], albedo[keep], source[keep]
    lambda_matrix, emergent = operators(steps, depth[0])
    source = np.linalg.solve(np.eye(b.size) - albedo[:, None] * lambda_matrix, (1.0 - albedo) * b)
    return emergent @ source


def operators(steps, top):
    """Matrix from source function to mean intensity, and vector from source function to emergent flux 4 H.

    Feautrier's equation for each angle,
    mu^2 (u[d+1] - u[d]) / p[d] - mu^2 (u[d] - u[d-1]) / p[d-1] = width[d] (u[d] - S[d]),
    eliminated so that layers as thin as 1e-9 do no harm; in the last layer J = S.
    """
    n = steps.size + 1
    mu = COSINES[:, None]
    width = np.concatenate([[0.5 * steps[0]], 0.5 * (steps[1:] + steps[:-1])])
    shade = 1.0 - np.exp(-top / mu)
    link = (mu**2 / steps)[:, :, None]
    right = np.zeros((n - 1, COSINES.size, n))
    right[np.arange(n - 1), :, np.arange(n - 1)] = width[:, None]
    right[0, :, :1] += mu * shade
    surplus = np.repeat(width[:, None], COSINES.size, axis=1)[:, :, None]  # diagonal minus the two links
    surplus[0] += mu
    carried, u = surplus.copy(), np.empty((n, COSINES.size, n))
    for d in range(1, n - 1):
        share = link[:, d - 1] / (link[:, d - 1] + carried[d - 1])
        carried[d] = surplus[d] + share * carried[d - 1]
        right[d, :, :d] = share * right[d - 1, :, :d]
    u[-1] = np.eye(n)[-1]
    for d in range(n - 2, -1, -1):
        u[d] = (right[d] + link[:, d] * u[d + 1]) / (link[:, d] + carried[d])
    surface = u[0].copy()
    surface[:, :1] -= shade
    return np.einsum("m,dmn->dn", WEIGHTS, u), 4.0 * (WEIGHTS * COSINES) @ surface


def reduced_width(structure, composition, lines, index, vmic, abundance, n_layers=240, n_profile=40):
    """log10(W / lambda) of one line."""
    x = np.linspace(np.log(structure.column_mass[0]), np.log(structure.column_mass[-1]), 4000)
    spline = CubicSpline(np.log(structure.column_mass), np.log(structure.temperature))
    pressure_spline = CubicSpline(np.log(structure.column_mass), np.log(structure.gas_pressure))
    coarse = equilibrium(np.exp(spline(x)), np.exp(pressure_spline(x)), composition)
    wave = float(air_to_vacuum(lines.wavelength_air[index])) * ANGSTROM_CM
    total = sum(continuum_opacity(np.array([wave]), coarse))[0]
    log_depth = np.log(np.concatenate([[0.0], np.cumsum(0.5 * np.diff(np.exp(x)) * (total[1:] + total[:-1]))]) + 1e-8)
    x = np.interp(np.linspace(np.log(1e-7), min(np.log(80.0), log_depth[-1]), n_layers), log_depth, x)
    x = np.unique(x)
    gas = equilibrium(np.exp(spline(x)), np.exp(pressure_spline(x)), composition)
    mass = np.exp(x)
    absorption, scattering = (values[0] for values in continuum_opacity(np.array([wave]), gas))
    one = slice(index, index + 1)
    ion = str(lines.ion[index])
    strength = line_strength(gas, ion, [wave], lines.excitation_potential[one], lines.log_gf[one])[0]
    width = damping_width(
        gas,
        ion,
        [wave],
        lines.excitation_potential[one],
        lines.upper_energy[one],
        lines.broadening_sigma[one],
        lines.broadening_alpha[one],
        lines.log_gamma_rad[one],
        lines.log_gamma_stark[one],
    )[0]
    doppler = doppler_width(gas.temperature, vmic)
    a = width * wave / (4.0 * np.pi * LIGHT_SPEED_CM_S * doppler)
    thermal = planck(wave, gas.temperature)
    free = flux(absorption + scattering, scattering, absorption * thermal, mass)
    unit = doppler[x.size // 2]
    points = np.concatenate([np.linspace(0.0, 6.0, n_profile)[:-1], np.geomspace(6.0, 3000.0, n_profile)]) * unit
    relative = np.empty(points.size)
    for k, point in enumerate(points):
        profile = wofz(point / doppler + 1j * a).real
        line = strength / doppler * profile * 10.0 ** (abundance - 12.0)
        relative[k] = 1.0 - flux(absorption + scattering + line, scattering, (absorption + line) * thermal, mass) / free
    integral = np.sum(0.5 * np.diff(points) * (relative[1:] + relative[:-1]))
    return np.log10(2.0 * (integral + relative[-1] * points[-1]))
