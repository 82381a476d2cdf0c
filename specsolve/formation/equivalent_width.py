"""Equivalent widths of lines from model atmospheres, for many microturbulences and abundances at once.

W / lambda = 2 * integral over the half profile of the relative depth R = 1 - F / F_continuum.

- Flux: F ~ 2 * integral of S(t) E2(t) dt over layers at equal steps x of log tau_5000, with t' = chi dm/dx. The
  integrand vanishes at both ends as a smooth function, so equal weights integrate it nearly exactly; t itself is
  accumulated by cubic pieces.
- Source function: S = (kappa_line S_line + kappa B + sigma J) / chi with J, at every point of the profile, from the
  moment equation d2(f J)/dt2 = J - S. The Eddington factors f of the layers come from angle-dependent solutions at
  four strengths of each line (`STRENGTH_NODES` times as opaque as the continuum), with a cubic between them.
- Profile: points c Doppler widths * sinh(s) with equal steps of s out to where the wing is thin; beyond, R falls with
  the square of the distance and is added analytically.

`reduced_widths` runs the compiled version, `reduced_widths_reference` is the same in NumPy.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from specsolve.lines import LineList
from specsolve.matter.composition import Composition
from specsolve.matter.line_profile import voigt
from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS

from .layers import N_LAYERS, Layers, LineOpacities, Structure, doppler_fractions, line_opacities, make_layers

Departures = Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]]
"""log tau_5000 -> departure coefficients of the lower and upper levels of the lines."""

N_PROFILE = 20
CORE_SCALE = 3.0
"""c of the profile points: about linear over the first 3 Doppler widths, exponential beyond."""
REFERENCE_LOG_TAU = -1.0
"""Layer whose Doppler width scales the profile points and whose opacity says how far the wings reach."""
REFERENCE_VMIC = 1.0  # km/s, for the shape in depth of the line opacity that sets the Eddington factors
STRENGTH_NODES = (0.0, 0.1, 0.6, 3.0)
WING_OPACITY = 0.01
"""Line over continuum opacity, at the reference layer, where the profile points end."""
LEAST_REACH = 5.0
"""The profile points reach at least this many Doppler widths."""


@dataclass(frozen=True, kw_only=True)
class EddingtonFactors:
    """Eddington factors at each line as cubics in y = r / (1 + r), r = line over continuum opacity at one layer.

    Attributes
    ----------
    inverse : ndarray, shape (n_lines, 4, n)
        1 / f = J / K at each layer is the sum over k of inverse[:, k] y^k.
    edge : ndarray, shape (n_lines, 4)
        The same for H / J at the first layer.
    opacity : ndarray, shape (n_lines,)
        Continuum opacity at the layer of r [cm2/g].
    layer : int
        Its index.
    """

    inverse: np.ndarray
    edge: np.ndarray
    opacity: np.ndarray
    layer: int


def reference_layer(layers: Layers) -> int:
    """Index of the layer nearest `REFERENCE_LOG_TAU`."""
    return int(np.argmin(np.abs(layers.log_tau - REFERENCE_LOG_TAU)))


def eddington_factors(layers: Layers, opacities: LineOpacities) -> EddingtonFactors:
    """Eddington factors at each line, from angle-dependent solutions with scattering."""
    from specsolve.radiation.transfer_kernels import radiation_field

    continuum = opacities.absorption + opacities.scattering
    layer = reference_layer(layers)
    doppler = doppler_fractions(layers, REFERENCE_VMIC)[0]
    shape = opacities.strength / doppler * voigt(opacities.damping / doppler, 0.0)
    shape *= (continuum[:, layer] / shape[:, layer])[:, None]  # r = 1 at the reference layer
    n_lines, n = continuum.shape
    eddington = np.full((n_lines, n), 1.0 / 3.0)
    edges = np.full((n_lines, 2), 0.5)
    inverse, edge = [], []
    for ratio in STRENGTH_NODES:
        line = ratio * shape
        total = continuum + line
        radiation_field(
            optical_steps(total * layers.mass_step),
            layers.column_mass[0] * (line[:, 0] + 0.5 * continuum[:, 0]),
            1.0 - opacities.scattering / total,
            (line * opacities.line_source + opacities.absorption * opacities.planck) / (total - opacities.scattering),
            ANGLE_COSINES,
            ANGLE_WEIGHTS,
            eddington,
            np.empty((n_lines, n)),
            np.empty((n_lines, n - 1)),
            np.empty(n_lines),
            edges,
        )
        inverse.append(1.0 / eddington)
        edge.append(edges[:, 0].copy())
    y = np.array(STRENGTH_NODES) / (1.0 + np.array(STRENGTH_NODES))
    to_cubic = np.linalg.inv(np.vander(y, increasing=True))
    return EddingtonFactors(
        inverse=np.einsum("cs,sld->lcd", to_cubic, np.array(inverse)),
        edge=np.einsum("cs,sl->lc", to_cubic, np.array(edge)),
        opacity=continuum[:, layer].copy(),
        layer=layer,
    )


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
    at = reference_layer(layers)
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
    layers: Layers, line_part: np.ndarray, opacities: LineOpacities, factors: EddingtonFactors, i: int
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
    ratio = line_part[factors.layer] / factors.opacity[i]
    y = ratio / (1.0 + ratio)
    inverse_f, edge = (
        c[0] + y * (c[1] + y * (c[2] + y * c[3])) for c in ([column(c) for c in factors.inverse[i]], factors.edge[i])
    )
    width = np.concatenate([0.5 * steps[:1], 0.5 * (steps[1:] + steps[:-1]), 0.5 * steps[-1:]])
    right = width * thermal
    right[-1] = thermal[-1] / (1.0 - albedo[-1]) / inverse_f[-1]
    moment = mean_intensity(steps, width * (1.0 - albedo) * inverse_f, right, edge * inverse_f[0])
    source = thermal + albedo * moment * inverse_f
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
    departures: Departures | None = None,
    n_layers: int = N_LAYERS,
    n_profile: int = N_PROFILE,
) -> np.ndarray:
    """As `reduced_widths`, in NumPy: the equations as they stand above, exact Voigt function and E2."""
    layers = make_layers(atmosphere, composition, n_layers)
    opacities = line_opacities(layers, lines, None if departures is None else departures(layers.log_tau))
    factors = eddington_factors(layers, opacities)
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
            flux = emergent_flux(layers, line_part, opacities, factors, i)
            free = emergent_flux(layers, np.zeros((layers.column_mass.size, 1)), opacities, factors, i)
            result[i, v] = np.log10(weights[i] @ (1.0 - flux / free))
    return result


def reduced_widths(
    atmosphere: Structure,
    composition: Composition,
    lines: LineList,
    vmic,
    abundances_a,
    *,
    departures: Departures | None = None,
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
    departures : callable, optional
        Gives, at log tau_5000 of the layers (n_layers,), the departure coefficients of the lower and the upper levels,
        each of shape (n_lines, n_layers). LTE without.

    Returns
    -------
    ndarray, shape (n_lines, n_v, n_a)
        Nan where a line is in emission. Numerically accurate, for the given structure, to 0.3 % of W below
        log(W / lambda) = -4.9 and to 1 % up to -4.5.

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
    opacities = line_opacities(layers, lines, None if departures is None else departures(layers.log_tau))
    factors = eddington_factors(layers, opacities)
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
            factors.inverse,
            factors.edge,
            factors.opacity,
            factors.layer,
            table(),
            widths,
        )
        result[:, v] = np.log10(np.where(widths > 0.0, widths, np.nan))
    return result
