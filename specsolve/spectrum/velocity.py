"""Radial velocity: the mean profile of the listed lines, weighted by their predicted depths, and where its centre lies.

The cross-correlation of a spectrum with narrow lines at the listed wavelengths is the weighted mean of the depth
1 - flux found at each shifted wavelength. Its peak is the velocity; a Gaussian with a sloping baseline, fitted to the
mean profile around the peak, gives the centre; leaving out a twentieth of the lines in turn gives its error, in which
noise, blends and errors of the listed wavelengths all count (jackknife; Efron & Stein 1981, Ann. Stat. 9, 586).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from specsolve.errors import SpectrumError
from specsolve.lines.wavelengths import refractive_index

from .mean_profile import (
    LIGHT_SPEED_KMS,
    Piece,
    Stack,
    centre_of,
    covered_by,
    jackknife,
    mean_profile,
    predicted_depths,
    stack_of,
)
from .types import Spectrum

SEARCH_RANGE = (-600.0, 600.0)
"""Velocities searched [km/s]: beyond the escape velocity from the Galaxy near the Sun (common practice, no source)."""
SEARCH_STEP = 1.0  # km/s
SMOOTHING = 3.0  # km/s, standard deviation, for the search only
LEAST_SIGNIFICANCE = 5.0
"""Peak over the scatter of the cross-correlation elsewhere: noise reaches 4 in 1 of 50 searches (tests)."""
LEAST_LINES = 8
N_GROUPS = 20
N_DRIFT_GROUPS = 8
PROFILE_HALF_RANGE = 60.0  # km/s
ORDER_SHIFT = 1.0
"""An order whose velocity differs by more than this [km/s] and by five errors is not on the common scale."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Velocity:
    """Velocity of a spectrum against the list.

    Attributes
    ----------
    value, error : float
        [km/s], positive when the star recedes; in the frame of the file's wavelengths.
    significance : float
        Height of the peak over the scatter elsewhere; nan if the velocity was given.
    fwhm : float
        Full width at half maximum of the mean profile [km/s].
    depth : float
        Its depth.
    n_lines : int
        Lines inside the spectrum.
    vacuum_share, vacuum_share_error : float
        How much of the drift with wavelength is seen that vacuum wavelengths taken for air ones would show: 0 as it
        should be, 1 if they are vacuum ones, -1 if air ones were converted.
    group_wavelength, group_value, group_error : ndarray
        Velocities of parts of the list, by wavelength [Angstrom, km/s].
    order_shift : mapping of int to float
        Orders that lie off by more than they should [km/s].
    search_velocity, search_profile : ndarray
        The cross-correlation [km/s, depth].
    barycentric : float
        Correction to the barycentre of the solar system [km/s]; nan if not asked for.
    barycentric_reason : str
        How it was found.
    notes : tuple of str
    """

    value: float
    error: float
    significance: float
    fwhm: float
    depth: float
    n_lines: int
    vacuum_share: float = float("nan")
    vacuum_share_error: float = float("nan")
    group_wavelength: np.ndarray = field(default_factory=lambda: np.empty(0))
    group_value: np.ndarray = field(default_factory=lambda: np.empty(0))
    group_error: np.ndarray = field(default_factory=lambda: np.empty(0))
    order_shift: dict[int, float] = field(default_factory=dict)
    search_velocity: np.ndarray = field(default_factory=lambda: np.empty(0))
    search_profile: np.ndarray = field(default_factory=lambda: np.empty(0))
    barycentric: float = float("nan")
    barycentric_reason: str = ""
    notes: tuple[str, ...] = ()


def measure_velocity(
    spectrum: Spectrum, wavelength_air, predicted_width, search: tuple[float, float] = SEARCH_RANGE
) -> Velocity:
    """Velocity of a spectrum by cross-correlation with a line list.

    Parameters
    ----------
    spectrum : Spectrum
    wavelength_air, predicted_width : ndarray, shape (n_lines,)
        Listed wavelengths [Angstrom] and predicted equivalent widths [mA].
    search : (float, float)
        Velocities to search [km/s].

    Returns
    -------
    Velocity

    Raises
    ------
    SpectrumError
        If few lines are inside, no peak stands out (another star?), or the lines are in emission.

    Examples
    --------
    >>> found = measure_velocity(spectrum, lines.wavelength_air, widths)       # doctest: +SKIP
    """
    wavelength = np.asarray(wavelength_air, float)
    weights = predicted_depths(wavelength, np.asarray(predicted_width, float))
    pieces = [Piece.of(order) for order in spectrum.orders()]
    covered = covered_by(pieces, wavelength)
    if covered.sum() < LEAST_LINES:
        low, high = spectrum.wavelength_air.min(), spectrum.wavelength_air.max()
        raise SpectrumError(
            f"{spectrum.path or spectrum.star}: {int(covered.sum())} lines of the list lie in the spectrum "
            f"({low:.0f}-{high:.0f} Angstrom); {LEAST_LINES} are needed for a velocity. Take a list for this range, "
            "or say --velocity.",
            path=spectrum.path,
            value=float(covered.sum()),
        )
    grid = np.arange(search[0], search[1] + SEARCH_STEP, SEARCH_STEP)
    profile = mean_profile(stack_of(pieces, wavelength, weights, grid, smooth=SMOOTHING), slice(None))
    peak, significance = _peak(spectrum, grid, profile)
    near = peak + np.arange(-PROFILE_HALF_RANGE, PROFILE_HALF_RANGE + 0.25, 0.5)
    stack = stack_of(pieces, wavelength, weights, near)
    value, fwhm, depth = centre_of(near, mean_profile(stack, slice(None)))
    if not np.isfinite(value) or abs(value - peak) > 10.0:
        raise SpectrumError(
            f"{spectrum.path or spectrum.star}: the peak at {peak:.0f} km/s has no profile that can be fitted: lines "
            "wider than 60 km/s, or not a star of iron lines.",
            path=spectrum.path,
            value=peak,
        )
    error = jackknife(near, stack, np.arange(wavelength.size), N_GROUPS)
    groups = _groups(near, stack, wavelength)
    share, share_error = _vacuum_share(*groups)
    notes = _air_notes(spectrum, share, share_error)
    shifts = {}
    if len(pieces) > 1:
        shifts = _order_shifts(pieces, wavelength, weights, near, value)
        notes += [f"order {number} lies {shift:+.2f} km/s off the others" for number, shift in shifts.items()]
    return Velocity(
        value=value,
        error=error,
        significance=significance,
        fwhm=fwhm,
        depth=depth,
        n_lines=int(covered.sum()),
        vacuum_share=share,
        vacuum_share_error=share_error,
        group_wavelength=groups[0],
        group_value=groups[1],
        group_error=groups[2],
        order_shift=shifts,
        search_velocity=grid,
        search_profile=profile,
        notes=tuple(notes),
    )


def to_rest(spectrum: Spectrum, found: Velocity) -> Spectrum:
    """The spectrum with the velocity taken out; orders that lie off are masked.

    Examples
    --------
    >>> rest = to_rest(spectrum, measure_velocity(spectrum, lines.wavelength_air, widths))  # doctest: +SKIP
    """
    mask = spectrum.mask | np.isin(spectrum.order, list(found.order_shift))
    return spectrum.replace(
        wavelength_air=spectrum.wavelength_air / (1.0 + found.value / LIGHT_SPEED_KMS),
        mask=mask,
        velocity=found.value,
        velocity_error=found.error,
        notes=(*spectrum.notes, *found.notes),
    )


def _peak(spectrum: Spectrum, velocity: np.ndarray, profile: np.ndarray) -> tuple[float, float]:
    """Velocity and significance of the highest peak."""
    usable = np.isfinite(profile)
    if not usable.any():
        raise SpectrumError(f"{spectrum.path or spectrum.star}: no usable pixel at any line of the list.")
    filled = np.where(usable, profile, np.nanmedian(profile))
    where = spectrum.path or spectrum.star

    def significance(values: np.ndarray) -> tuple[int, float]:
        top = int(np.argmax(values))
        far = usable & (np.abs(velocity - velocity[top]) > 40.0)
        elsewhere = values[far] if far.sum() > 50 else values
        scatter = 1.4826 * np.median(np.abs(elsewhere - np.median(elsewhere)))
        return top, float((values[top] - np.median(elsewhere)) / max(scatter, 1e-12))

    top, height = significance(filled)
    _, dip = significance(-filled)
    if dip > LEAST_SIGNIFICANCE and dip > 1.5 * height:
        raise SpectrumError(
            f"{where}: the iron lines stand in emission (cross-correlation {-dip:.1f} sigma): equivalent widths of "
            "absorption lines cannot be measured.",
            path=spectrum.path,
            value=-dip,
        )
    if height < LEAST_SIGNIFICANCE:
        raise SpectrumError(
            f"{where}: no velocity found between {velocity[0]:.0f} and {velocity[-1]:.0f} km/s: the highest peak has "
            f"{height:.1f} sigma, {LEAST_SIGNIFICANCE:g} are needed. Another kind of star, wrong wavelengths, or say "
            "--velocity.",
            path=spectrum.path,
            value=height,
        )
    return float(velocity[top]), height


def _groups(velocity: np.ndarray, stack: Stack, wavelength: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Velocities of parts of the list, in order of wavelength."""
    rows = np.flatnonzero(stack.weight.sum(axis=1) > 0.0)
    rows = rows[np.argsort(wavelength[rows], kind="stable")]
    n_groups = min(N_DRIFT_GROUPS, rows.size // LEAST_LINES)
    found = []
    for part in np.array_split(rows, n_groups) if n_groups >= 2 else []:
        value = centre_of(velocity, mean_profile(stack, part))[0]
        error = jackknife(velocity, stack, part, N_DRIFT_GROUPS)
        if np.isfinite(value) and error > 0.0:
            weight = stack.weight[part].sum(axis=1)
            found.append((float(np.average(wavelength[part], weights=weight)), value, error))
    columns = np.array(found).reshape(-1, 3)
    return columns[:, 0], columns[:, 1], columns[:, 2]


def _vacuum_share(wavelength: np.ndarray, value: np.ndarray, error: np.ndarray) -> tuple[float, float]:
    """Drift in units of the one that air and vacuum mixed up would show."""
    if wavelength.size < 3:
        return float("nan"), float("nan")
    drift = LIGHT_SPEED_KMS * (refractive_index(wavelength) - 1.0)
    weight = 1.0 / error**2
    x = drift - np.average(drift, weights=weight)
    y = value - np.average(value, weights=weight)
    share = float(np.sum(weight * x * y) / np.sum(weight * x * x))
    chi2 = float(np.sum(weight * (y - share * x) ** 2) / (wavelength.size - 2))
    return share, float(np.sqrt(max(chi2, 1.0) / np.sum(weight * x * x)))


def _air_notes(spectrum: Spectrum, share: float, error: float) -> list[str]:
    if not np.isfinite(share) or error > 0.33:
        return []
    converted = "vacuum" in spectrum.air_source
    wrong = -1.0 if converted else 1.0
    if abs(share - wrong) < abs(share) and abs(share) > 4.0 * error:
        now, other = ("vacuum", "air") if converted else ("air", "vacuum")
        return [
            f"the wavelengths taken as {now} ones ({spectrum.air_source}) look like {other} ones: the velocity drifts "
            f"with wavelength by {share:.2f} +- {error:.2f} of what mixing them up would do; say --medium {other}"
        ]
    return []


def _order_shifts(
    pieces: list[Piece], wavelength: np.ndarray, weights: np.ndarray, velocity: np.ndarray, common: float
) -> dict[int, float]:
    """Orders with a velocity of their own that is far from the common one [km/s]."""
    off = {}
    for piece in pieces:
        stack = stack_of([piece], wavelength, weights, velocity)
        rows = np.flatnonzero(stack.weight.sum(axis=1) > 0.0)
        if rows.size < LEAST_LINES // 2:
            continue
        value = centre_of(velocity, mean_profile(stack, rows))[0]
        error = jackknife(velocity, stack, rows, rows.size)
        if np.isfinite(value) and error > 0.0 and abs(value - common) > max(ORDER_SHIFT, 5.0 * error):
            off[piece.number] = float(value - common)
    return off
