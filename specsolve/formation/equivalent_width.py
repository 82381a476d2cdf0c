"""Equivalent widths of lines from model atmospheres, for many microturbulences and abundances at once.

W / lambda = 2 * integral over the half profile of the relative depth R = 1 - F / F_continuum.

- Flux: F ~ 2 * integral of S(t) E2(t) dt over layers at equal steps x of log tau_5000, t' = chi dm/dx. The integrand vanishes
  at both ends as a smooth function, so equal weights integrate it nearly exactly; t itself is accumulated by cubic pieces.
- Source function: S = (kappa_line S_line + kappa B + sigma J) / chi with J, at every point of the profile, from the moment
  equation d2(f J)/dt2 = J - S, where the Eddington factor is f(t) = 1/3 + d / (1 + t / t_half) with d and t_half from the exact
  angle-dependent solution of the continuum.
- Profile: points c Doppler widths * sinh(s) with equal steps of s out to where the wing is thin; beyond, R falls with the
  square of the distance and is added analytically.

`reduced_widths` runs the compiled version, `reduced_widths_reference` is the same in NumPy.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.lines import LineList
from specsolve.matter.composition import Composition
from specsolve.matter.line_profile import voigt
from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS

from .layers import N_LAYERS, Layers, LineOpacities, Structure, doppler_fractions, line_opacities, make_layers

N_PROFILE = 20
CORE_SCALE = 3.0
"""c of the profile points: about linear over the first 3 Doppler widths, exponential beyond."""
REFERENCE_LOG_TAU = -1.0
"""Layer whose Doppler width scales the profile points and whose opacity says how far the wings reach."""
WING_OPACITY = 0.01
"""Line over continuum opacity, at the reference layer, where the profile points end."""
LEAST_REACH = 5.0
"""The profile points reach at least this many Doppler widths."""


@dataclass(frozen=True, kw_only=True)
class Continuum:
    """Continuum at each line, shapes (n_lines,).

    Attributes
    ----------
    eddington_surplus : ndarray
        d of f(t) = 1/3 + d / (1 + t / t_half).
    eddington_scale : ndarray
        1 / t_half.
    edge : ndarray
        H / J at the first layer.
    """

    eddington_surplus: np.ndarray
    eddington_scale: np.ndarray
    edge: np.ndarray


def continuum_field(layers: Layers, opacities: LineOpacities) -> Continuum:
    """Eddington factors of the continuum at each line, from the angle-dependent solution with scattering."""
    from specsolve.radiation.transfer_kernels import radiation_field

    total = opacities.absorption + opacities.scattering
    growth = total * layers.mass_step
    steps = optical_steps(growth)
    tops = 0.5 * total[:, 0] * layers.column_mass[0]
    n_lines, n = total.shape
    eddington = np.full((n_lines, n), 1.0 / 3.0)
    mean, flux, surface = np.zeros((n_lines, n)), np.zeros((n_lines, n - 1)), np.zeros(n_lines)
    edges = np.full((n_lines, 2), 0.5)
    radiation_field(
        steps,
        tops,
        opacities.absorption / total,
        opacities.planck,
        ANGLE_COSINES,
        ANGLE_WEIGHTS,
        eddington,
        mean,
        flux,
        surface,
        edges,
    )
    depth = tops[:, None] + np.concatenate([np.zeros((n_lines, 1)), np.cumsum(steps, axis=1)], axis=1)
    surplus = eddington[:, 0] - 1.0 / 3.0
    half = np.array([np.interp(0.0, *_falling(e, s, d)) for e, s, d in zip(eddington, surplus, depth, strict=True)])
    return Continuum(eddington_surplus=surplus, eddington_scale=np.exp(-half), edge=edges[:, 0])


def _falling(eddington, surplus, depth):
    """Abscissae and ordinates to find ln t where the surplus of f has fallen to half its surface value."""
    fraction = 0.5 - (eddington - 1.0 / 3.0) / surplus if surplus != 0.0 else np.linspace(-0.5, 0.5, depth.size)
    crossing = np.flatnonzero(fraction >= 0.0)
    i = max(int(crossing[0]), 1) if crossing.size else depth.size - 1
    return fraction[i - 1 : i + 1], np.log(depth[i - 1 : i + 1])


def optical_steps(growth: np.ndarray) -> np.ndarray:
    """Optical thickness between layers from dt/dx at them (last axis), by cubics through four layers.

    Examples
    --------
    >>> optical_steps(np.array([0.0, 1.0, 8.0, 27.0])).round(2).tolist()  # integral of x^3
    [0.25, 3.75, 16.25]
    """
    g = growth
    inner = (13.0 * (g[..., 1:-2] + g[..., 2:-1]) - g[..., :-3] - g[..., 3:]) / 24.0
    first = (9.0 * g[..., 0] + 19.0 * g[..., 1] - 5.0 * g[..., 2] + g[..., 3]) / 24.0
    last = (9.0 * g[..., -1] + 19.0 * g[..., -2] - 5.0 * g[..., -3] + g[..., -4]) / 24.0
    return np.concatenate([first[..., None], inner, last[..., None]], axis=-1)


def profile_points(
    layers: Layers, opacities: LineOpacities, doppler: np.ndarray, highest_abundance: float, n_profile: int = N_PROFILE
) -> tuple[np.ndarray, np.ndarray]:
    """Points of the half profile and their weights, for one microturbulence.

    Parameters
    ----------
    layers : Layers
    opacities : LineOpacities
    doppler : ndarray, shape (n,)
        Doppler width over wavelength.
    highest_abundance : float
        Largest A(Fe) wanted; decides how far the wings reach.
    n_profile : int

    Returns
    -------
    points, weights : ndarray, shape (n_lines, n_profile)
        Both in units of the wavelength; the analytic wing is inside the last weight.
    """
    at = int(np.argmin(np.abs(layers.log_tau - REFERENCE_LOG_TAU)))
    unit = doppler[at]
    ratio = opacities.strength[:, at] * 10.0 ** (highest_abundance - 12.0) / unit
    ratio /= opacities.absorption[:, at] + opacities.scattering[:, at]
    reach = np.sqrt(ratio * opacities.damping[:, at] / unit / (np.sqrt(np.pi) * WING_OPACITY))
    reach = np.hypot(reach, LEAST_REACH)
    end = np.arcsinh(reach / CORE_SCALE)
    s = np.linspace(0.0, 1.0, n_profile) * end[:, None]
    step = (end / (n_profile - 1))[:, None]
    points = CORE_SCALE * unit * np.sinh(s)
    weights = CORE_SCALE * unit * np.cosh(s) * step
    weights[:, 0] *= 0.5
    # half weight at the end, Euler-Maclaurin term for an integrand that falls as exp(-s), and the wing beyond
    weights[:, -1] *= 0.5 + step[:, 0] / 12.0
    weights[:, -1] += points[:, -1]
    return points, 2.0 * weights


def mean_intensity(steps, extra, right, edge):
    """f J of the moment equation by elimination without cancellation (Rybicki & Hummer 1991, A&A 245, 171, appendix A).

    Parameters
    ----------
    steps : ndarray, shape (n - 1, ...)
        Optical thickness between layers.
    extra, right : ndarray, shape (n, ...)
        Width times eps / f, and width times the thermal source; the last layer is thermal.
    edge : ndarray, shape (...)
        (H / J) / f at the first layer.

    Returns
    -------
    ndarray, shape (n, ...)
    """
    n = extra.shape[0]
    ratio, value = np.empty_like(extra), np.empty_like(extra)
    ratio[0] = (extra[0] + edge) * steps[0]
    value[0] = right[0] * steps[0] / (1.0 + ratio[0])
    for d in range(1, n - 1):
        lower, upper = 1.0 / steps[d - 1], 1.0 / steps[d]
        carried = extra[d] + lower * ratio[d - 1] / (1.0 + ratio[d - 1])
        ratio[d] = carried / upper
        value[d] = (right[d] + lower * value[d - 1]) / (upper + carried)
    result = np.empty_like(extra)
    result[n - 1] = right[n - 1]
    for d in range(n - 2, -1, -1):
        result[d] = value[d] + result[d + 1] / (1.0 + ratio[d])
    return result


def emergent_flux(
    layers: Layers, line_part: np.ndarray, opacities: LineOpacities, continuum: Continuum, i: int
) -> np.ndarray:
    """Flux of line i for given line opacities, in units of pi times that of its source functions.

    Parameters
    ----------
    line_part : ndarray, shape (n, ...)
        Line opacity at each layer [cm2/g].

    Returns
    -------
    ndarray, shape (...)
    """
    from scipy.special import expn

    shape = (-1,) + (1,) * (line_part.ndim - 1)

    def column(values):
        return values.reshape(shape)

    absorption, scattering = column(opacities.absorption[i]), column(opacities.scattering[i])
    chi = absorption + scattering + line_part
    growth = chi * column(layers.mass_step)
    steps = np.moveaxis(optical_steps(np.moveaxis(growth, 0, -1)), -1, 0)
    top = layers.column_mass[0] * (line_part[0] + 0.5 * (absorption + scattering)[0])
    depth = top + np.concatenate([np.zeros_like(steps[:1]), np.cumsum(steps, axis=0)])
    thermal = (line_part * column(opacities.line_source[i]) + absorption * column(opacities.planck[i])) / chi
    albedo = scattering / chi
    f = 1.0 / 3.0 + continuum.eddington_surplus[i] / (1.0 + continuum.eddington_scale[i] * depth)
    width = np.concatenate([0.5 * steps[:1], 0.5 * (steps[1:] + steps[:-1]), 0.5 * steps[-1:]])
    right = width * thermal
    right[-1] = f[-1] * thermal[-1] / (1.0 - albedo[-1])
    moment = mean_intensity(steps, width * (1.0 - albedo) / f, right, continuum.edge[i] / f[0])
    source = thermal + albedo * moment / f
    contribution = 2.0 * source * expn(2, depth) * growth
    above = source[0] * (1.0 - 2.0 * expn(3, top))
    return above + contribution.sum(axis=0) - 0.5 * contribution[0] - 0.5 * contribution[-1]


def reduced_widths_reference(
    atmosphere: Structure,
    composition: Composition,
    lines: LineList,
    vmic,
    abundances_a,
    *,
    n_layers: int = N_LAYERS,
    n_profile: int = N_PROFILE,
) -> np.ndarray:
    """As `reduced_widths`, in NumPy: the equations as they stand above, exact Voigt function and E2."""
    layers = make_layers(atmosphere, composition, n_layers)
    opacities = line_opacities(layers, lines)
    continuum = continuum_field(layers, opacities)
    abundances_a = np.atleast_1d(np.asarray(abundances_a, float))
    amounts = 10.0 ** (abundances_a - 12.0)
    vmic = np.atleast_1d(np.asarray(vmic, float))
    result = np.empty((len(lines), vmic.size, abundances_a.size))
    for v, doppler in enumerate(doppler_fractions(layers, vmic)):
        points, weights = profile_points(layers, opacities, doppler, abundances_a.max(), n_profile)
        for i in range(len(lines)):
            profile = voigt((opacities.damping[i] / doppler)[:, None], points[i][None, :] / doppler[:, None])
            unit = (opacities.strength[i] / doppler)[:, None] * profile
            line_part = unit[:, :, None] * amounts
            flux = emergent_flux(layers, line_part, opacities, continuum, i)
            free = emergent_flux(layers, np.zeros((layers.column_mass.size, 1)), opacities, continuum, i)
            result[i, v] = np.log10(weights[i] @ (1.0 - flux / free))
    return result


def reduced_widths(
    atmosphere: Structure,
    composition: Composition,
    lines: LineList,
    vmic,
    abundances_a,
    *,
    departures: tuple[np.ndarray, np.ndarray] | None = None,
    n_layers: int = N_LAYERS,
    n_profile: int = N_PROFILE,
) -> np.ndarray:
    """log10(W / lambda) of lines from one model atmosphere.

    Parameters
    ----------
    atmosphere : Structure
        Column mass [g/cm2], temperature [K], gas pressure [dyn/cm2], electron density [cm-3], each (n,), inwards.
    composition : Composition
        Of the atmosphere; the iron of the lines comes from `abundances_a`.
    lines : LineList
    vmic : ndarray, shape (n_v,)
        Microturbulence [km/s].
    abundances_a : ndarray, shape (n_a,)
        A(Fe) = log10(N_Fe / N_H) + 12.
    departures : pair of ndarray, shape (n_lines, n_layers), optional
        Departure coefficients of the lower and upper levels at the layers of `make_layers`; LTE without.

    Returns
    -------
    ndarray, shape (n_lines, n_v, n_a)
        Nan where a line is in emission. Accurate to 0.3 % of W below log(W / lambda) = -4.9 and 1 % to -4.5 (numerically, for the given structure).

    Raises
    ------
    ValueError
        If the structure is not usable, see `make_layers`.

    Examples
    --------
    >>> widths = reduced_widths(model, composition, lines, [1.0], [7.46])  # doctest: +SKIP
    """
    from .exponential_integral import table
    from .kernels import relative_widths

    layers = make_layers(atmosphere, composition, n_layers)
    opacities = line_opacities(layers, lines, departures)
    continuum = continuum_field(layers, opacities)
    abundances_a = np.atleast_1d(np.asarray(abundances_a, float))
    amounts = np.concatenate([[0.0], 10.0 ** (abundances_a - 12.0)])
    vmic = np.atleast_1d(np.asarray(vmic, float))
    result = np.empty((len(lines), vmic.size, abundances_a.size))
    work, widths = np.empty(n_layers), np.empty((len(lines), abundances_a.size))
    for v, doppler in enumerate(doppler_fractions(layers, vmic)):
        points, weights = profile_points(layers, opacities, doppler, abundances_a.max(), n_profile)
        relative_widths(
            work,
            layers.mass_step,
            layers.column_mass,
            amounts,
            doppler,
            points,
            weights,
            opacities.absorption,
            opacities.scattering,
            opacities.strength,
            opacities.damping,
            opacities.planck,
            opacities.line_source,
            continuum.eddington_surplus,
            continuum.eddington_scale,
            continuum.edge,
            table(),
            widths,
        )
        result[:, v] = np.log10(np.where(widths > 0.0, widths, np.nan))
    return result
