"""Small synthesis in LTE: the flux of a piece of spectrum, relative to its continuum, from lines of all elements.

The wavelengths are cut into blocks of `BLOCK` Angstrom. In a block the continuous opacity, the Planck function and the
Eddington factors (cubics in the strength of the line opacity, see `equivalent_width`) are those of its middle; line
opacities of all lines that reach a point are added there and the flux follows as for equivalent widths. Not
contained: molecules, hydrogen lines, hyperfine structure, departures from LTE.

`relative_flux` runs the compiled version, `relative_flux_reference` is the same in NumPy.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.constants import ANGSTROM_CM, ATOMIC_MASS_G, LIGHT_SPEED_CM_S
from specsolve.lines import LineList, air_to_vacuum
from specsolve.matter.broadening import doppler_width
from specsolve.matter.composition import ATOMIC_WEIGHTS, Composition, number_abundance
from specsolve.matter.line_opacity import damping_width, line_strength

from .equivalent_width import EddingtonFactors, eddington_factors, emergent_flux, reference_layer
from .layers import N_LAYERS, Layers, LineOpacities, Structure, line_opacities, make_layers
from .spectral_lines import SpectralLines

BLOCK = 10.0  # Angstrom
LEAST_OPACITY = 3e-5
"""A line ends where its opacity at the reference layer falls below this part of the continuum's."""
FURTHEST_REACH = 3e-3
"""... but reaches no further than this fraction of its wavelength (15 Angstrom at 5000 Angstrom)."""
TYPICAL = {"excitation_potential": 3.0, "log_gf": -2.0}  # of the Fe I line whose shape in depth gives Eddington factors


@dataclass(frozen=True, kw_only=True, eq=False)
class Medium:
    """An atmosphere as synthesis sees it.

    Attributes
    ----------
    layers : Layers
    composition : Composition
    iron : float
        A(Fe) of the lines.
    edges : ndarray, shape (n_blocks + 1,)
        Air wavelengths between blocks [Angstrom].
    blocks : LineOpacities
        Continuum and Planck function of each block, shape (n_blocks, n).
    factors : EddingtonFactors
        Of each block.
    """

    layers: Layers
    composition: Composition
    iron: float
    edges: np.ndarray
    blocks: LineOpacities
    factors: EddingtonFactors

    def block_of(self, wavelength_air) -> np.ndarray:
        """Block of each wavelength [Angstrom]; those outside belong to the first or last."""
        return np.clip(np.searchsorted(self.edges, wavelength_air, side="right") - 1, 0, self.edges.size - 2)


def make_medium(
    atmosphere: Structure, composition: Composition, iron: float, low: float, high: float, n_layers: int = N_LAYERS
) -> Medium:
    """Prepare an atmosphere for a range of air wavelengths [Angstrom].

    Parameters
    ----------
    atmosphere : Structure
    composition : Composition
    iron : float
        A(Fe) = log10(N_Fe / N_H) + 12 of the lines; other elements follow the composition.
    low, high : float
    """
    layers = make_layers(atmosphere, composition, n_layers)
    edges = np.linspace(low, high, max(2, int(np.ceil((high - low) / BLOCK)) + 1))
    middles = 0.5 * (edges[1:] + edges[:-1])
    typical = LineList.from_arrays(
        middles,
        np.full(middles.size, "Fe I"),
        np.full(middles.size, TYPICAL["excitation_potential"]),
        np.full(middles.size, TYPICAL["log_gf"]),
    )
    blocks = line_opacities(layers, typical)
    return Medium(
        layers=layers,
        composition=composition,
        iron=float(iron),
        edges=edges,
        blocks=blocks,
        factors=eddington_factors(layers, blocks),
    )


@dataclass(frozen=True, kw_only=True, eq=False)
class Opacities:
    """Opacities of lines in one medium, in the order of wavelength.

    Attributes
    ----------
    lines : SpectralLines
        Those that matter.
    block : ndarray of int, shape (n_lines,)
    element : ndarray of int, shape (n_lines,)
        Row of `doppler`.
    doppler : ndarray, shape (n_elements, n)
        Doppler width as a fraction of the wavelength.
    strength, damping : ndarray, shape (n_lines, n)
        As in `LineOpacities`, the abundance included in the strength.
    reach : ndarray, shape (n_lines,)
        Fraction of the wavelength beyond which the line is left out.
    """

    lines: SpectralLines
    block: np.ndarray
    element: np.ndarray
    doppler: np.ndarray
    strength: np.ndarray
    damping: np.ndarray
    reach: np.ndarray


def amount_of(symbol: str, medium: Medium) -> float:
    """Atoms of an element per hydrogen nucleus."""
    if symbol == "Fe":
        return 10.0 ** (medium.iron - 12.0)
    return number_abundance(symbol, medium.composition.mh, medium.composition.alpha)


def strengths_at(medium: Medium, lines: SpectralLines, layer: slice) -> np.ndarray:
    """Line opacities without profile [cm2/g] at some layers, shape (n_lines, n_layers of the slice)."""
    from dataclasses import replace

    gas = medium.layers.gas
    part = replace(
        gas,
        **{
            name: values[..., layer]
            for name, values in vars(gas).items()
            if isinstance(values, np.ndarray) and values.ndim and values.shape[-1] == gas.temperature.size
        },
    )
    result = np.zeros((len(lines), part.temperature.size))
    wavelength = lines.wavelength_vacuum * ANGSTROM_CM
    for ion in np.unique(lines.ion):
        amount = amount_of(str(ion).split()[0], medium)
        if amount > 0.0:
            of = np.flatnonzero(lines.ion == ion)
            strength = line_strength(part, str(ion), wavelength[of], lines.excitation_potential[of], lines.log_gf[of])
            result[of] = amount * strength
    return result


def central_ratios(medium: Medium, lines: SpectralLines, vmic: float) -> np.ndarray:
    """Line over continuum opacity at the lines' centres in the reference layer, without the loss by damping."""
    at = reference_layer(medium.layers)
    temperature = medium.layers.gas.temperature[at]
    names, inverse = np.unique(lines.ion, return_inverse=True)
    masses = np.array([ATOMIC_WEIGHTS[str(ion).split()[0]] * ATOMIC_MASS_G for ion in names], dtype=float)
    doppler = doppler_width(temperature, float(vmic), masses)[inverse]
    continuum = medium.factors.opacity[medium.block_of(lines.wavelength_air)]
    return strengths_at(medium, lines, slice(at, at + 1))[:, 0] / doppler / continuum


def opacities_of(medium: Medium, lines: SpectralLines, vmic: float, least: float = 1e-3) -> Opacities:
    """Opacities of the lines that matter.

    Parameters
    ----------
    medium : Medium
    lines : SpectralLines
    vmic : float
        Microturbulence [km/s].
    least : float
        Lines whose opacity at their centre, in the reference layer, is below this part of the continuum are dropped.
    """
    layers = medium.layers
    at = reference_layer(layers)
    elements = sorted({str(ion).split()[0] for ion in np.unique(lines.ion)})
    row = {symbol: i for i, symbol in enumerate(elements)}
    doppler = np.array(
        [doppler_width(layers.gas.temperature, float(vmic), ATOMIC_WEIGHTS[s] * ATOMIC_MASS_G) for s in elements]
    ).reshape(-1, layers.gas.temperature.size)
    names, inverse = np.unique(lines.ion, return_inverse=True)
    element = np.array([row[str(ion).split()[0]] for ion in names], dtype=np.int64)[inverse]
    block = medium.block_of(lines.wavelength_air)
    ratio = central_ratios(medium, lines, vmic)
    keep = np.flatnonzero(ratio > least)
    lines, element, block, ratio = lines.select(keep), element[keep], block[keep], ratio[keep]
    strength = strengths_at(medium, lines, slice(None))
    damping = np.empty_like(strength)
    wavelength = lines.wavelength_vacuum * ANGSTROM_CM
    upper = lines.upper_energy
    for ion in np.unique(lines.ion):
        of = np.flatnonzero(lines.ion == ion)
        damping[of] = damping_width(
            layers.gas,
            str(ion),
            wavelength[of],
            lines.excitation_potential[of],
            upper[of],
            lines.broadening_sigma[of],
            lines.broadening_alpha[of],
            lines.log_gamma_rad[of],
            lines.log_gamma_stark[of],
            ATOMIC_WEIGHTS[str(ion).split()[0]] * ATOMIC_MASS_G,
        )
    damping *= wavelength[:, None] / (4.0 * np.pi * LIGHT_SPEED_CM_S)
    unit = doppler[element, at]
    core = np.sqrt(np.log(np.maximum(ratio / LEAST_OPACITY, 1.0))) + 1.0
    wing = np.sqrt(ratio * damping[:, at] / unit / (np.sqrt(np.pi) * LEAST_OPACITY))
    return Opacities(
        lines=lines,
        block=block,
        element=element,
        doppler=doppler,
        strength=strength,
        damping=damping,
        reach=np.minimum(np.maximum(core, wing) * unit, FURTHEST_REACH),
    )


def relative_flux(medium: Medium, opacities: Opacities, wavelength_air) -> np.ndarray:
    """Flux over continuum flux at wavelengths, without rotation, macroturbulence or instrument.

    Parameters
    ----------
    medium : Medium
    opacities : Opacities
    wavelength_air : ndarray, shape (n_points,)
        Increasing [Angstrom].

    Returns
    -------
    ndarray, shape (n_points,)

    Examples
    --------
    >>> flux = relative_flux(medium, opacities_of(medium, lines, 1.0), np.arange(6000.0, 6010.0, 0.01))  # doctest: +SKIP
    """
    from .exponential_integral import table
    from .synthesis_kernels import add_lines

    wavelength = np.asarray(wavelength_air, float)
    if wavelength.size and not np.all(np.diff(wavelength) > 0.0):
        raise ValueError("wavelengths of a synthesis must increase")
    result = np.empty(wavelength.size)
    vacuum = air_to_vacuum(wavelength)
    centre = opacities.lines.wavelength_vacuum
    bounds = np.searchsorted(medium.block_of(wavelength), np.arange(medium.edges.size))
    for b in range(medium.edges.size - 1):
        points = slice(bounds[b], bounds[b + 1])
        if points.start == points.stop:
            continue
        piece = vacuum[points]
        first = np.searchsorted(centre, piece[0] * (1.0 - FURTHEST_REACH))
        last = np.searchsorted(centre, piece[-1] * (1.0 + FURTHEST_REACH))
        part = np.zeros((medium.layers.column_mass.size, piece.size + 1))  # the last point is the continuum
        add_lines(
            part[:, :-1],
            piece,
            first,
            last,
            centre,
            opacities.reach,
            opacities.element,
            opacities.doppler,
            opacities.strength,
            opacities.damping,
        )
        flux = _flux(medium, b, part, table())
        result[points] = flux[:-1] / flux[-1]
    return result


def _flux(medium: Medium, block: int, part: np.ndarray, e2: np.ndarray) -> np.ndarray:
    """Flux for line opacities (n, n_points) in a block."""
    from .synthesis_kernels import flux_of_block

    flux = np.empty(part.shape[1])
    flux_of_block(
        part,
        medium.layers.mass_step,
        medium.layers.column_mass,
        medium.blocks.absorption[block],
        medium.blocks.scattering[block],
        medium.blocks.planck[block],
        medium.factors.inverse[block],
        medium.factors.edge[block],
        medium.factors.opacity[block],
        medium.factors.layer,
        e2,
        flux,
    )
    return flux


def relative_flux_reference(medium: Medium, opacities: Opacities, wavelength_air) -> np.ndarray:
    """As `relative_flux`, in NumPy with the exact Voigt function and E2, every line at every point."""
    from specsolve.matter.line_profile import voigt

    wavelength = np.asarray(wavelength_air, float)
    vacuum = air_to_vacuum(wavelength)
    block = medium.block_of(wavelength)
    result = np.empty(wavelength.size)
    for b in np.unique(block):
        at = np.flatnonzero(block == b)
        part = np.zeros((medium.layers.column_mass.size, at.size + 1))
        for i, centre in enumerate(opacities.lines.wavelength_vacuum):
            width = opacities.doppler[opacities.element[i]][:, None]
            distance = (vacuum[at] / centre - 1.0)[None, :] / width
            profile = voigt(opacities.damping[i][:, None] / width, distance)
            part[:, :-1] += opacities.strength[i][:, None] / width * profile
        flux = emergent_flux(medium.layers, part, medium.blocks, medium.factors, int(b))
        result[at] = flux[:-1] / flux[-1]
    return result


def line_profiles(medium: Medium, opacities: Opacities, velocity, dA) -> np.ndarray:
    """Depths 1 - F/Fc of single lines, each as if alone, at distances from their centres.

    Parameters
    ----------
    medium : Medium
    opacities : Opacities
    velocity : ndarray, shape (n_v,)
        Distance from the centre [km/s].
    dA : ndarray, shape (n_a,)
        Abundances relative to those of the medium [dex].

    Returns
    -------
    ndarray, shape (n_lines, n_a, n_v)
    """
    from .exponential_integral import table
    from .synthesis_kernels import add_lines

    fraction = np.asarray(velocity, float) * 1e5 / LIGHT_SPEED_CM_S
    amounts = 10.0 ** np.atleast_1d(np.asarray(dA, float))
    n, n_v = medium.layers.column_mass.size, fraction.size
    order = np.argsort(fraction)
    points = 1.0 + fraction[order]
    one, far = np.ones(1), np.full(1, np.inf)
    result = np.empty((len(opacities.lines), amounts.size, n_v))
    part = np.empty((n, amounts.size * n_v + 1))
    for i in range(len(opacities.lines)):
        line = np.zeros((n, n_v))
        add_lines(
            line,
            points,
            0,
            1,
            one,
            far,
            opacities.element[i : i + 1],
            opacities.doppler,
            opacities.strength[i : i + 1],
            opacities.damping[i : i + 1],
        )
        part[:, :-1] = (line[:, None, :] * amounts[:, None]).reshape(n, -1)
        part[:, -1] = 0.0
        flux = _flux(medium, int(opacities.block[i]), part, table())
        result[i][:, order] = (1.0 - flux[:-1] / flux[-1]).reshape(amounts.size, n_v)
    return result


def velocity_points(n: int = 33, furthest: float = 400.0, scale: float = 3.0) -> tuple[np.ndarray, np.ndarray]:
    """Points of a half profile [km/s] and their weights for a width: the sum of weights times depths is W c / lambda.

    Dense near the centre, exponentially thinner outwards; beyond the last point a wing that falls as 1/v^2 is added.

    Examples
    --------
    >>> v, w = velocity_points()
    >>> round(float(w @ np.exp(-((v / 5.0) ** 2))) / (5.0 * np.pi**0.5), 3)
    1.0
    """
    end = np.arcsinh(furthest / scale)
    s = np.linspace(0.0, end, n)
    points = scale * np.sinh(s)
    weights = 2.0 * scale * np.cosh(s) * (end / (n - 1))
    weights[0] *= 0.5
    weights[-1] = 0.5 * weights[-1] + 2.0 * points[-1]
    return points, weights


def line_widths(medium: Medium, opacities: Opacities, dA=(0.0,), n_points: int = 17) -> np.ndarray:
    """W / lambda of single lines, shape (n_lines, n_a); good to 1 % (`equivalent_width` is better and slower)."""
    velocity, weights = velocity_points(n_points)
    return line_profiles(medium, opacities, velocity, dA) @ weights / (LIGHT_SPEED_CM_S * 1e-5)
