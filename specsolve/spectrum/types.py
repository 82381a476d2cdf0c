"""What goes through the room: `Spectrum` (pixels), `Neighbours` (predicted lines), `Measurements` (widths of lines).

Wavelengths are in air [Angstrom], widths in mA, velocities in km/s.  A mask is True where a pixel must not be used
(the convention of `numpy.ma`).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

FLAG_BLEND = 1
FLAG_SATURATED = 2
FLAG_BAD_PIXELS = 4
FLAG_COSMIC_RAY = 8
FLAG_TELLURIC = 16
FLAG_ASYMMETRIC = 32
FLAG_ORDER_EDGE = 64
FLAG_UPPER_LIMIT = 128
FLAG_EMISSION = 256
FLAG_NOT_COVERED = 512
FLAG_SHIFTED = 1024
FLAG_CONTINUUM = 2048
FLAG_INTEGRATION_DIFFERS = 4096
FLAG_NOT_FITTED = 8192

FLAG_WORDS = {
    FLAG_BLEND: "blend",
    FLAG_SATURATED: "saturated",
    FLAG_BAD_PIXELS: "bad_pixels",
    FLAG_COSMIC_RAY: "cosmic_ray",
    FLAG_TELLURIC: "telluric",
    FLAG_ASYMMETRIC: "asymmetric",
    FLAG_ORDER_EDGE: "order_edge",
    FLAG_UPPER_LIMIT: "upper_limit",
    FLAG_EMISSION: "emission",
    FLAG_NOT_COVERED: "not_covered",
    FLAG_SHIFTED: "shifted",
    FLAG_CONTINUUM: "uncertain_continuum",
    FLAG_INTEGRATION_DIFFERS: "integration_differs",
    FLAG_NOT_FITTED: "not_fitted",
}


def words_of_flags(flags: int) -> str:
    """Names of the set flags, separated by commas; empty if none is set.

    Examples
    --------
    >>> words_of_flags(FLAG_BLEND | FLAG_TELLURIC)
    'blend,telluric'
    """
    return ",".join(word for bit, word in FLAG_WORDS.items() if int(flags) & bit)


@dataclass(frozen=True, kw_only=True, eq=False)
class Spectrum:
    """One spectrum, all orders one after another; arrays of shape (n_pixels,).

    Within an order wavelengths increase strictly; orders are sorted by their first wavelength and may overlap.

    Attributes
    ----------
    star : str
    wavelength_air : ndarray
        [Angstrom], in the frame that `velocity` tells.
    flux : ndarray
        Any linear scale; about 1 in the continuum if `normalised`.
    sigma : ndarray
        1-sigma error of the flux, same scale; positive where the mask is False.
    mask : ndarray of bool
        True where a pixel must not be used.
    order : ndarray of int
        Number of the order of each pixel, from 0.
    correlation : float
        Variance of the sum of many pixels over that of independent pixels: above 1 where pixels were interpolated.
    resolving_power : float
        lambda / FWHM of the instrument; nan if unknown (it is then fitted together with the star's broadening).
    normalised : bool
        The continuum was divided out before.
    velocity : float
        Velocity that was taken out of the wavelengths [km/s]; 0 as read.
    velocity_error : float
        [km/s]; nan as read.
    sigma_source : str
        Where the errors come from: "file", "said", "estimated".
    air_source : str
        Why the wavelengths are air ones: "header", "said", "assumed", or the same with "vacuum, converted".
    notes : tuple of str
        What was decided on reading, one sentence each.
    header : mapping
        Keywords of the file that matter (plain values).
    path : str
        File name, for messages.

    Examples
    --------
    >>> one = Spectrum.from_arrays("A", [5000.0, 5000.1], [1.0, 0.9], sigma=0.01)
    >>> one.n_pixels, one.n_orders
    (2, 1)
    """

    star: str
    wavelength_air: np.ndarray
    flux: np.ndarray
    sigma: np.ndarray
    mask: np.ndarray
    order: np.ndarray
    correlation: float = 1.0
    resolving_power: float = float("nan")
    normalised: bool = True
    velocity: float = 0.0
    velocity_error: float = float("nan")
    sigma_source: str = "said"
    air_source: str = "said"
    notes: tuple[str, ...] = ()
    header: Mapping[str, Any] = field(default_factory=dict)
    path: str = ""

    @classmethod
    def from_arrays(cls, star: str, wavelength_air, flux, *, sigma, mask=None, order=None, **further: Any) -> Spectrum:
        """Build from arrays; `sigma` may be one number, missing mask and order are "none" and 0."""
        wavelength = np.asarray(wavelength_air, float)
        values = np.asarray(flux, float)
        return cls(
            star=str(star),
            wavelength_air=wavelength,
            flux=values,
            sigma=np.broadcast_to(np.asarray(sigma, float), values.shape).copy(),
            mask=np.zeros(values.shape, bool) if mask is None else np.asarray(mask, bool),
            order=np.zeros(values.shape, np.int64) if order is None else np.asarray(order, np.int64),
            **further,
        )

    @property
    def n_pixels(self) -> int:
        """Number of pixels of all orders."""
        return self.wavelength_air.size

    @property
    def n_orders(self) -> int:
        """Number of orders."""
        return int(np.unique(self.order).size)

    @property
    def good(self) -> np.ndarray:
        """True where a pixel may be used."""
        return ~self.mask

    @property
    def signal_to_noise(self) -> float:
        """Median of flux over error per pixel of the usable pixels; nan if there are none."""
        good = self.good & (self.sigma > 0.0)
        return float(np.median(self.flux[good] / self.sigma[good])) if good.any() else float("nan")

    def replace(self, **changes: Any) -> Spectrum:
        """A copy with some attributes replaced."""
        return replace(self, **changes)

    def orders(self) -> list[Spectrum]:
        """One spectrum an order."""
        return [self.select(self.order == number) for number in np.unique(self.order)]

    def select(self, index) -> Spectrum:
        """The pixels of an index array, slice or mask."""
        names = ("wavelength_air", "flux", "sigma", "mask", "order")
        return replace(self, **{name: getattr(self, name)[index] for name in names})


@dataclass(frozen=True, kw_only=True, eq=False)
class Neighbours:
    """Predicted lines of all elements in the neighbourhood of the lines to measure; arrays of shape (n_neighbours,).

    Attributes
    ----------
    wavelength_air : ndarray
        [Angstrom]
    ion : ndarray of str
    excitation_potential : ndarray
        [eV]
    predicted_width : ndarray
        Equivalent width predicted for about this star [mA].
    """

    wavelength_air: np.ndarray
    ion: np.ndarray
    excitation_potential: np.ndarray
    predicted_width: np.ndarray

    def __len__(self) -> int:
        return self.wavelength_air.size


@dataclass(frozen=True, kw_only=True, eq=False)
class Window:
    """Pixels and fit around one line, for figures; arrays of shape (n_pixels,), rest frame.

    Attributes
    ----------
    wavelength_air, flux, sigma : ndarray
        Flux and its error divided by the continuum.
    model : ndarray
        The whole fit, continuum 1.
    line : ndarray
        The line alone.
    neighbours : ndarray
        The neighbours alone.
    used : ndarray of bool
        Pixels in the fit.
    continuum_error : float
        Relative error of the continuum here.
    """

    wavelength_air: np.ndarray
    flux: np.ndarray
    sigma: np.ndarray
    model: np.ndarray
    line: np.ndarray
    neighbours: np.ndarray
    used: np.ndarray
    continuum_error: float


@dataclass(frozen=True, kw_only=True, eq=False)
class Measurements:
    """Equivalent widths of the lines of a list in one spectrum; arrays of shape (n_lines,), in the list's order.

    Attributes
    ----------
    star : str
    wavelength_air, ion, excitation_potential, log_gf : ndarray
        Of the list.
    equivalent_width, equivalent_width_error : ndarray
        [mA]; nan where the spectrum does not cover the line; the error holds noise, continuum and blends.
        Where `FLAG_UPPER_LIMIT` is set the width is the (insignificant) measured one and `upper_limit` counts.
    noise_error, continuum_error, blend_error : ndarray
        Parts of the error, in quadrature [mA]. `continuum_error` is common to lines of one `continuum_group`:
        their covariance is the product of the two.
    continuum_group : ndarray of int
        Lines of one group share their continuum; -1 for none.
    upper_limit : ndarray
        Three sigma [mA].
    integrated_width : ndarray
        Width by direct integration after the neighbours are taken out [mA].
    predicted_width : ndarray
        What was expected beforehand [mA]; nan if nothing was.
    depth : ndarray
        Central depth of the fitted line, 0 to 1.
    line_fwhm : ndarray
        Fitted full width at half depth [km/s].
    line_shift : ndarray
        Fitted centre minus list wavelength [km/s].
    chi2 : ndarray
        Reduced chi square of the fit.
    order : ndarray of int
        Order in which the line was measured; -1 for none or several.
    flags : ndarray of int
        Bits, see `words_of_flags`.
    use : ndarray of bool
        Good enough for a solve.
    windows : tuple of Window or None
        Pixels and fits, one a line; None where there is none.
    broadening : float
        Common full width at half maximum of instrument, macroturbulence and rotation [km/s].
    broadening_error : float
    rotation : float
        Part of it fitted as rotation, v sin i [km/s]; nan if not.
    notes : tuple of str
    """

    star: str
    wavelength_air: np.ndarray
    ion: np.ndarray
    excitation_potential: np.ndarray
    log_gf: np.ndarray
    equivalent_width: np.ndarray
    equivalent_width_error: np.ndarray
    noise_error: np.ndarray
    continuum_error: np.ndarray
    blend_error: np.ndarray
    continuum_group: np.ndarray
    upper_limit: np.ndarray
    integrated_width: np.ndarray
    predicted_width: np.ndarray
    depth: np.ndarray
    line_fwhm: np.ndarray
    line_shift: np.ndarray
    chi2: np.ndarray
    order: np.ndarray
    flags: np.ndarray
    use: np.ndarray
    windows: tuple[Window | None, ...] = ()
    broadening: float = float("nan")
    broadening_error: float = float("nan")
    rotation: float = float("nan")
    notes: tuple[str, ...] = ()

    def __len__(self) -> int:
        return self.wavelength_air.size
