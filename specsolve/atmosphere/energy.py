"""Energy balance of a trial structure, and its derivative with respect to temperature.

Unknown is ln T at fixed column mass m. With F the sum of radiative and convective flux between depth points,

    above log tau = -2.5:   F(below) - F(above) = sum of eps dtau (J - B) + change of F_conv = 0, over sum of eps dtau B;
    deeper:                 F / (sigma Teff^4) - 1 = 0   (its logarithm where F is too large), or, where convection
                            has to carry much, the same solved for the gradient: grad = grad(F - F_rad).

The differences are those of the transfer equation itself, so that flux is conserved exactly from the pinned depth to the
surface.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing
from specsolve.atmosphere.channels import Channels, channels
from specsolve.atmosphere.convection import convective_flux, required_gradient
from specsolve.constants import LIGHT_SPEED_CM_S, STEFAN_BOLTZMANN
from specsolve.matter.composition import Composition
from specsolve.matter.thermodynamics import thermodynamics
from specsolve.radiation.transfer_kernels import flux_response, solve_channels

DERIVATIVE_STEP = 2e-5  # in ln T; larger steps break the convective derivative of cool dwarfs
PINNED_LOG_TAU = -2.5  # below it the flux itself is the equation
EFFICIENT_EXCESS = 0.5  # and only if that takes less than this excess over the adiabatic gradient
CONVECTIVE_SHARE = 0.05  # where radiation leaves more than this to convection, the gradient is the equation


@dataclass(frozen=True, kw_only=True)
class Balance:
    """Energy balance of a trial structure: what one Newton step needs and what a reader wants to plot."""

    residual: np.ndarray  # (n,)
    jacobian: np.ndarray  # (n, n), d residual / d ln T
    radiative_flux: np.ndarray  # (n - 1,), over sigma Teff^4
    convective_flux: np.ndarray  # (n - 1,)
    surface_flux: float
    radiative_acceleration: np.ndarray  # (n,) [cm / s2]
    log_tau: np.ndarray
    field: dict[str, np.ndarray]
    layers: Channels

    @property
    def flux_error(self) -> float:
        """Largest relative departure of the total flux from sigma Teff^4."""
        total = np.append(self.radiative_flux + self.convective_flux, self.surface_flux)
        return float(np.max(np.abs(total - 1.0)))


def optical_depth(opacity: np.ndarray, column_mass: np.ndarray) -> np.ndarray:
    """Optical depth at each point, opacity proportional to column mass above the first, trapezoid in m below."""
    steps = 0.5 * (opacity[1:] + opacity[:-1]) * np.diff(column_mass)
    return 0.5 * opacity[0] * column_mass[0] + np.concatenate([[0.0], np.cumsum(steps)])


def _rosseland(layers: Channels, planck_slope: np.ndarray) -> np.ndarray:
    """Rosseland mean opacity (n,) [cm2 / g], weighted with the temperature derivative of the Planck function."""
    return planck_slope.sum(axis=0) / (planck_slope / layers.opacity).sum(axis=0)


@dataclass(frozen=True, kw_only=True)
class Convection:
    """Convection between the points: flux, and departure of the gradient from the one that would carry what radiation leaves.

    Every array has shape (n - 1,); `above` and `below` are derivatives with respect to ln T of the two points.
    """

    flux: np.ndarray
    flux_above: np.ndarray
    flux_below: np.ndarray
    departure: np.ndarray
    departure_above: np.ndarray
    departure_below: np.ndarray
    departure_by_flux: np.ndarray  # with respect to the flux that convection has to carry
    efficient: np.ndarray  # bool: that flux takes a moderate excess of the gradient over the adiabatic one


def _convection(log_t: np.ndarray, pressure: np.ndarray, composition: Composition, rosseland: np.ndarray,
                rosseland_slope: np.ndarray, gravity: float, wanted: np.ndarray) -> Convection:  # fmt: skip
    """Convection between the points; `wanted` (n - 1,) is the flux that radiation leaves to it."""
    log_p = np.log(pressure)
    spacing = np.diff(log_p)
    middle = 0.5 * (log_t[1:] + log_t[:-1])
    middle_p = np.exp(0.5 * (log_p[1:] + log_p[:-1]))
    gradient = np.diff(log_t) / spacing
    log_chi = np.log(rosseland)
    chi = np.exp(0.5 * (log_chi[1:] + log_chi[:-1]))
    h = DERIVATIVE_STEP
    here = thermodynamics(np.exp(middle), middle_p, composition)
    warm = thermodynamics(np.exp(middle + h), middle_p, composition)

    def state(log_temperature: np.ndarray, opacity: np.ndarray, thermo) -> tuple:
        return (np.exp(log_temperature), middle_p, thermo.density, thermo.heat_capacity,
                thermo.adiabatic_gradient, thermo.expansion, opacity, gravity)  # fmt: skip

    now, warmer, opaquer = state(middle, chi, here), state(middle + h, chi, warm), state(middle, chi * (1.0 + h), here)

    def spread(by_gradient: np.ndarray, by_middle: np.ndarray, by_opacity: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        above = -by_gradient / spacing + 0.5 * by_middle + 0.5 * by_opacity * rosseland_slope[:-1]
        below = by_gradient / spacing + 0.5 * by_middle + 0.5 * by_opacity * rosseland_slope[1:]
        return above, below

    flux = convective_flux(gradient, *now)
    flux_above, flux_below = spread(
        (convective_flux(gradient + h, *now) - convective_flux(gradient - h, *now)) / (2.0 * h),
        (convective_flux(gradient, *warmer) - flux) / h,
        (convective_flux(gradient, *opaquer) - flux) / h,
    )
    required = required_gradient(wanted, *now)
    departure_above, departure_below = spread(
        np.ones_like(gradient),
        -(required_gradient(wanted, *warmer) - required) / h,
        -(required_gradient(wanted, *opaquer) - required) / h,
    )
    nudge = wanted * 1e-4
    by_flux = -(required_gradient(wanted + nudge, *now) - required) / nudge
    return Convection(
        flux=flux, flux_above=flux_above, flux_below=flux_below, departure=gradient - required,
        departure_above=departure_above, departure_below=departure_below, departure_by_flux=by_flux,
        efficient=required - here.adiabatic_gradient < EFFICIENT_EXCESS,
    )  # fmt: skip


def energy_balance(
    log_t: np.ndarray,
    pressure: np.ndarray,
    column_mass: np.ndarray,
    teff: float,
    gravity: float,
    composition: Composition,
    blanketing: Blanketing,
    vmic: float,
    power: float,
    field: dict[str, np.ndarray] | None = None,
) -> Balance:
    """Residuals of the energy equations of a trial structure and their Jacobian.

    Parameters
    ----------
    log_t, pressure, column_mass : ndarray, shape (n,)
        ln T [K], gas pressure [dyn / cm2], [g / cm2].
    teff, gravity : float
        [K], [cm / s2].
    composition, blanketing, vmic, power
        See `channels`.
    field : dict, optional
        Radiation field of an earlier call, as a first guess of the Eddington factors.

    Returns
    -------
    Balance
    """
    h = DERIVATIVE_STEP
    layers = channels(np.exp(log_t), pressure, composition, blanketing, vmic, power)
    warmer = channels(np.exp(log_t + h), pressure, composition, blanketing, vmic, power)
    slopes = [(getattr(warmer, name) - getattr(layers, name)) / h for name in ("opacity", "destruction", "thermal")]
    guess = {} if field is None else {"eddington": field["eddington"], "edges": field["edges"]}
    field = solve_channels(layers.opacity, layers.destruction, layers.thermal, column_mass, **guess)
    d_flux, d_net = flux_response(
        column_mass, field["steps"], layers.destruction, layers.thermal, *slopes,
        field["eddington"], field["mean"], field["flux"], field["edges"],
    )  # fmt: skip
    rosseland = _rosseland(layers, slopes[2])
    rosseland_slope = np.log(_rosseland(warmer, slopes[2]) / rosseland) / h

    n = len(log_t)
    target = STEFAN_BOLTZMANN * teff**4
    radiative = 4.0 * np.pi * field["flux"].sum(axis=0) / target
    jac_flux = 4.0 * np.pi * d_flux / target
    moving = _convection(
        log_t,
        pressure,
        composition,
        rosseland,
        rosseland_slope,
        gravity,
        target * np.maximum(1.0 - radiative, 0.5 * CONVECTIVE_SHARE),
    )
    convective = moving.flux / target
    rows = np.arange(n - 1)
    jac_conv = np.zeros((n - 1, n))
    jac_conv[rows, rows] = moving.flux_above / target
    jac_conv[rows, rows + 1] = moving.flux_below / target
    jac_departure = -target * moving.departure_by_flux[:, None] * jac_flux
    jac_departure[rows, rows] += moving.departure_above
    jac_departure[rows, rows + 1] += moving.departure_below

    width = np.pad(field["steps"], ((0, 0), (1, 1)))
    width = 0.5 * (width[:, 1:] + width[:, :-1])
    emitted = 4.0 * np.pi * (width * layers.destruction * layers.thermal).sum(axis=0) / target
    net = 4.0 * np.pi * (width * layers.destruction * (field["mean"] - layers.thermal)).sum(axis=0) / target
    padded = np.pad(convective, 1)
    jac_padded = np.pad(jac_conv, ((1, 1), (0, 0)))
    differences = net + padded[1:] - padded[:-1]
    jac_differences = 4.0 * np.pi * d_net / target + jac_padded[1:] - jac_padded[:-1]

    log_tau = np.log10(optical_depth(layers.reference_opacity, column_mass))
    pinned = max(int(np.searchsorted(log_tau, PINNED_LOG_TAU)), 2)
    total = radiative + convective
    excess = total > 1.0
    flux_residual = np.where(excess, np.log(np.where(excess, total, 1.0)), total - 1.0)
    flux_jacobian = (jac_flux + jac_conv) / np.where(excess, total, 1.0)[:, None]
    mostly_moving = ((1.0 - radiative > CONVECTIVE_SHARE) | (convective > 1.0)) & moving.efficient
    flux_residual = np.where(mostly_moving, moving.departure, flux_residual)
    flux_jacobian = np.where(mostly_moving[:, None], jac_departure, flux_jacobian)
    residual = np.concatenate([differences[:pinned] / emitted[:pinned], flux_residual[pinned - 1 :]])
    jacobian = np.concatenate([jac_differences[:pinned] / emitted[:pinned, None], flux_jacobian[pinned - 1 :]])
    surface = 4.0 * np.pi * field["surface"].sum() / target
    inner = np.concatenate([field["surface"][:, None], field["flux"]], axis=1)
    flux_at_points = np.concatenate([inner[:, :1], 0.5 * (inner[:, 1:-1] + inner[:, 2:]), inner[:, -1:]], axis=1)
    push = 4.0 * np.pi / LIGHT_SPEED_CM_S * (layers.opacity * flux_at_points).sum(axis=0)
    return Balance(
        residual=residual, jacobian=jacobian, radiative_flux=radiative, convective_flux=convective,
        surface_flux=float(surface), radiative_acceleration=push, log_tau=log_tau, field=field, layers=layers,
    )  # fmt: skip
