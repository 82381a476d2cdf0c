"""Line blanketing: distribution of the line opacity in bands of wavelength, over temperature and gas pressure.

In every band the line opacities (per gram) of equally spaced wavelengths are sorted, and averaged inside fixed
intervals of cumulative fraction, the sub-bins (opacity distribution functions). The tables lie on uniform grids of
log10 T and log10 P and are read by a cubic spline in both, with continuous second derivatives.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing_lines import DATA_FOLDER

#: Edges of the sub-bins in cumulative fraction of the wavelengths of a band, weakest opacity first.
SUB_EDGES = np.array([0.0, 0.2, 0.4, 0.55, 0.7, 0.8, 0.88, 0.94, 0.975, 0.99, 1.0])
#: Step of the stored integers, and the logarithm that zero stands for [dex].
LOG_OPACITY_STEP = 5e-4
LOG_OPACITY_LOWEST = -14.0
#: Above the hottest node the table goes on along its slope, times 10^-(x / TAPER_DEX)^2, x the excess in log T [dex].
TAPER_DEX = 0.1
#: Metallicities of the packaged tables.
PACKAGED_MH = (-3.0, -2.5, -2.0, -1.5, -1.0, -0.5, 0.0, 0.5)


@dataclass(frozen=True, kw_only=True)
class Blanketing:
    """Opacity distribution tables of one metallicity.

    Attributes
    ----------
    mh : float
        [Fe/H] of the mixture [dex]; [alpha/Fe] by `specsolve.matter.composition.alpha_law`.
    band_edges_cm : ndarray, shape (n_bands + 1,)
        Vacuum wavelengths [cm], ascending.
    sub_weights : ndarray, shape (n_sub,)
        Fraction of a band's wavelengths in each sub-bin, weakest opacity first; the sum is 1.
    log_temperature : ndarray, shape (n_t,)
        log10 T [K], uniform.
    log_pressure : ndarray, shape (n_p,)
        log10 of the gas pressure [dyn cm^-2], uniform.
    vmic : ndarray, shape (n_v,)
        Microturbulence of the opacity [km/s], ascending.
    log_opacity : ndarray of float32, shape (n_v, n_bands, n_sub, n_t, n_p)
        log10 of the line opacity [cm^2 g^-1].
    multiplier : ndarray, shape (n_bands,)
        Factor on the line opacity for what the lists lack; see `specsolve.atmosphere.blanketing_calibration`.
    """

    mh: float
    band_edges_cm: np.ndarray
    sub_weights: np.ndarray
    log_temperature: np.ndarray
    log_pressure: np.ndarray
    vmic: np.ndarray
    log_opacity: np.ndarray
    multiplier: np.ndarray

    @property
    def n_bands(self) -> int:
        """Number of bands."""
        return len(self.band_edges_cm) - 1

    @property
    def band_centres_cm(self) -> np.ndarray:
        """Middle of each band [cm], shape (n_bands,)."""
        return 0.5 * (self.band_edges_cm[1:] + self.band_edges_cm[:-1])

    @cached_property
    def spline(self) -> np.ndarray:
        """Coefficients of the cubic B-spline, shape (n_t + 2, n_p + 2, n_v, n_bands * n_sub)."""
        n_v, n_bands, n_sub, n_t, n_p = self.log_opacity.shape
        values = self.log_opacity.reshape(n_v, n_bands * n_sub, n_t, n_p).astype(float)
        values = np.einsum("it,vktp->vkip", spline_matrix(n_t), values)
        values = np.einsum("jp,vkip->ijvk", spline_matrix(n_p), values)
        return np.ascontiguousarray(values)


def spline_matrix(n: int) -> np.ndarray:
    """Matrix from n values on a uniform grid to the n + 2 coefficients of the cubic B-spline through them.

    At each end the third derivative is continuous at the second node ("not a knot").
    """
    if n < 4:
        raise ValueError(f"{n} nodes are too few for a cubic spline; 4 are needed.")
    system = np.zeros((n + 2, n + 2))
    for i in range(n):
        system[i, i : i + 3] = np.array([1.0, 4.0, 1.0]) / 6.0
    system[n, :5] = system[n + 1, -5:] = 1.0, -4.0, 6.0, -4.0, 1.0
    return np.linalg.inv(system)[:, :n]


def spline_weights(fraction: np.ndarray) -> np.ndarray:
    """Weights of the four B-splines that do not vanish in a cell, shape (4, n), `fraction` in [0, 1]."""
    f, g = fraction, 1.0 - fraction
    return np.array([g**3, 4.0 - 6.0 * f**2 + 3.0 * f**3, 4.0 - 6.0 * g**2 + 3.0 * g**3, f**3]) / 6.0


def spline_slopes(fraction: np.ndarray) -> np.ndarray:
    """Derivatives of `spline_weights` by the fraction, shape (4, n)."""
    f, g = fraction, 1.0 - fraction
    return np.array([-(g**2), -4.0 * f + 3.0 * f**2, 4.0 * g - 3.0 * g**2, f**2]) / 2.0


def table_position(blanketing: Blanketing, temperature: np.ndarray, gas_pressure: np.ndarray):
    """Cells, spline weights and log10 of the taper for each point.

    Returns
    -------
    cell_t, cell_p : ndarray of int, shape (n,)
    weights_t, weights_p : ndarray, shape (4, n)
    log_taper : ndarray, shape (n,)

    Raises
    ------
    ValueError
        A point cooler than the table, or outside its pressures.
    """
    log_t, log_p = np.log10(temperature), np.log10(gas_pressure)
    grid_t, grid_p = blanketing.log_temperature, blanketing.log_pressure
    if not np.all(log_t >= grid_t[0] - 1e-9):
        raise ValueError(
            f"temperature {np.min(temperature):.0f} K is below the blanketing tables, "
            f"which begin at {10 ** grid_t[0]:.0f} K."
        )
    if not np.all((log_p >= grid_p[0] - 1e-9) & (log_p <= grid_p[-1] + 1e-9)):
        raise ValueError(
            f"log10 of the gas pressure from {log_p.min():.2f} to {log_p.max():.2f} is outside the blanketing tables "
            f"({grid_p[0]:.2f} to {grid_p[-1]:.2f}, dyn/cm2)."
        )
    place_t = (log_t - grid_t[0]) / (grid_t[1] - grid_t[0])
    place_p = (log_p - grid_p[0]) / (grid_p[1] - grid_p[0])
    cell_t = np.clip(place_t.astype(int), 0, len(grid_t) - 2)
    cell_p = np.clip(place_p.astype(int), 0, len(grid_p) - 2)
    beyond = np.maximum(place_t - (len(grid_t) - 1), 0.0)
    weights_t = spline_weights(place_t - beyond - cell_t) + beyond * spline_slopes(np.ones_like(beyond))
    log_taper = -((np.maximum(log_t - grid_t[-1], 0.0) / TAPER_DEX) ** 2)
    return cell_t, cell_p, weights_t, spline_weights(place_p - cell_p), log_taper


def vmic_weights(blanketing: Blanketing, vmic: float) -> np.ndarray:
    """Weights (n_v,) of linear interpolation in the microturbulence; ValueError outside the table."""
    nodes = blanketing.vmic
    if not nodes[0] <= vmic <= nodes[-1]:
        raise ValueError(
            f"opacity microturbulence {vmic} km/s is outside the blanketing tables ({nodes[0]} to {nodes[-1]})."
        )
    return np.array([np.interp(vmic, nodes, row) for row in np.eye(len(nodes))])


def line_opacity_reference(
    blanketing: Blanketing, temperature, gas_pressure, vmic: float, power: float = 0.0
) -> np.ndarray:
    """`line_opacity` in plain NumPy: the test oracle."""
    temperature, gas_pressure = np.asarray(temperature, dtype=float), np.asarray(gas_pressure, dtype=float)
    cell_t, cell_p, weights_t, weights_p, log_taper = table_position(blanketing, temperature, gas_pressure)
    table = np.einsum("ijvk,v->ijk", blanketing.spline, vmic_weights(blanketing, vmic))
    log_opacity = np.zeros((len(temperature), table.shape[2]))
    for i in range(4):
        for j in range(4):
            log_opacity += (weights_t[i] * weights_p[j])[:, None] * table[cell_t + i, cell_p + j]
    opacity = 10.0 ** (log_opacity + log_taper[:, None])
    factors = blanketing.multiplier[:, None, None] ** power
    return factors * opacity.T.reshape(blanketing.n_bands, len(blanketing.sub_weights), -1)


def line_opacity(blanketing: Blanketing, temperature, gas_pressure, vmic: float, power: float = 0.0) -> np.ndarray:
    """Line opacity of every band and sub-bin.

    Parameters
    ----------
    blanketing : Blanketing
    temperature : ndarray, shape (n,)
        [K]; at or above the coolest node. Above the hottest node (lines are negligible there) see `TAPER_DEX`.
    gas_pressure : ndarray, shape (n,)
        [dyn cm^-2], inside the table.
    vmic : float
        Microturbulence of the opacity [km/s], inside the table; the logarithm is interpolated linearly.
    power : float
        The opacity is multiplied by `multiplier` to this power: 0 (default) is the raw line lists, 1 the calibrated
        opacity.

    Returns
    -------
    ndarray, shape (n_bands, n_sub, n)
        [cm^2 g^-1], stimulated emission taken off.

    Raises
    ------
    ValueError
        A point or the microturbulence outside the table.

    Examples
    --------
    >>> opacity = line_opacity(load_blanketing(0.0), np.array([5000.0]), np.array([1e4]), 1.0)
    >>> bool(np.all(np.diff(opacity[:, :, 0], axis=1) >= 0))
    True
    """
    from specsolve.atmosphere.blanketing_kernel import evaluate

    temperature, gas_pressure = np.asarray(temperature, dtype=float), np.asarray(gas_pressure, dtype=float)
    cell_t, cell_p, weights_t, weights_p, log_taper = table_position(blanketing, temperature, gas_pressure)
    n_sub = len(blanketing.sub_weights)
    factors = np.repeat(blanketing.multiplier**power, n_sub)
    weights_v = vmic_weights(blanketing, vmic)
    opacity = evaluate(blanketing.spline, cell_t, cell_p, weights_t, weights_p, weights_v, log_taper, factors)
    return opacity.reshape(blanketing.n_bands, n_sub, -1)


def table_path(mh: float, folder: Path = DATA_FOLDER) -> Path:
    """File of the tables of one metallicity."""
    return Path(folder) / f"opacity_{mh:+.2f}.npz"


def save_blanketing(blanketing: Blanketing, path: Path) -> None:
    """Write tables (without the multiplier, which has a file of its own) as differences of scaled integers."""
    scaled = np.rint((blanketing.log_opacity - LOG_OPACITY_LOWEST) / LOG_OPACITY_STEP).astype(np.int64)
    if scaled.min() < 0 or scaled.max() > np.iinfo(np.uint16).max:
        raise ValueError("opacities outside the range that can be stored")
    steps = np.diff(scaled, axis=-1, prepend=0).astype(np.int16)
    np.savez_compressed(
        path,
        mh=np.float64(blanketing.mh),
        band_edges_cm=blanketing.band_edges_cm,
        sub_weights=blanketing.sub_weights,
        log_temperature=blanketing.log_temperature,
        log_pressure=blanketing.log_pressure,
        vmic=blanketing.vmic,
        log_opacity_steps=steps,
    )


def load_blanketing(mh: float, folder: Path = DATA_FOLDER) -> Blanketing:
    """Tables of one packaged metallicity.

    Raises
    ------
    FileNotFoundError
        No table of that metallicity; between the packaged ones build one with
        `specsolve.atmosphere.blanketing_build.build`.

    Examples
    --------
    >>> load_blanketing(-1.0).mh
    -1.0
    """
    path = table_path(mh, folder)
    if not path.exists():
        raise FileNotFoundError(f"no blanketing table for [M/H] = {mh:+.2f}; packaged are {PACKAGED_MH}.")
    with np.load(path, allow_pickle=False) as stored:
        scaled = np.cumsum(stored["log_opacity_steps"], axis=-1, dtype=np.int32) & 0xFFFF  # differences wrap at 16 bits
        log_opacity = (LOG_OPACITY_LOWEST + LOG_OPACITY_STEP * scaled).astype(np.float32)
        names = ("band_edges_cm", "sub_weights", "log_temperature", "log_pressure", "vmic")
        arrays = {name: stored[name] for name in names}
        mh = float(stored["mh"])
    multiplier = load_multiplier(arrays["band_edges_cm"])
    return Blanketing(mh=mh, log_opacity=log_opacity, multiplier=multiplier, **arrays)


def load_multiplier(band_edges_cm: np.ndarray, path: Path = DATA_FOLDER / "multiplier.csv") -> np.ndarray:
    """The calibrated factor of each band, read from the packaged table; ValueError if it has other bands."""
    low, high, multiplier = np.loadtxt(path, delimiter=",", unpack=True, comments="#")
    edges_nm = np.append(low, high[-1])
    if edges_nm.shape != band_edges_cm.shape or not np.allclose(edges_nm * 1e-7, band_edges_cm, rtol=1e-9):
        raise ValueError(f"{path.name} does not have the bands of the opacity tables.")
    return multiplier
