"""Radial velocity: the mean profile of the listed lines, weighted by their predicted depths, and where its centre lies.

The cross-correlation of a spectrum with narrow lines at the listed wavelengths is the weighted mean of the depth
1 - flux found at each shifted wavelength. Its peak is the velocity; a Gaussian with a sloping baseline, fitted to the
mean profile around the peak, gives the centre; leaving out a twentieth of the lines in turn gives its error, in which
noise, blends and errors of the listed wavelengths all count (jackknife; Efron & Stein 1981, Ann. Stat. 9, 586).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from specsolve.constants import LIGHT_SPEED_CM_S
from specsolve.errors import SpectrumError
from specsolve.lines.wavelengths import refractive_index

from .types import Spectrum

LIGHT_SPEED_KMS = LIGHT_SPEED_CM_S * 1e-5
SEARCH_RANGE = (-600.0, 600.0)
"""Velocities searched [km/s]: beyond the escape velocity from the Galaxy near the Sun (common practice, no source)."""
SEARCH_STEP = 1.0  # km/s
LINE_VELOCITY = 6.0
"""Width in velocity at which a line is half saturated: depth = w / (w + 6 km/s), w = c W / lambda (shape only)."""
SMOOTHING = 3.0  # km/s, standard deviation, for the search only
LEVEL_PIECE = 8.0  # Angstrom, for the rough upper envelope
LEVEL_PERCENTILE = 90.0
DEPTH_LIMITS = (-0.3, 1.0)
BLEND_NOISE = 0.05
"""Scatter of the depth at a line that blends alone make; it keeps a few lines of high S/N from ruling."""
LEAST_SIGNIFICANCE = 5.0
"""Peak over the scatter of the cross-correlation elsewhere: noise reaches 4 in 1 of 50 searches (tests)."""
LEAST_LINES = 8
N_GROUPS = 20
N_DRIFT_GROUPS = 8
FIT_HALF_WIDTH = 1.3  # of the profile's FWHM
PROFILE_HALF_RANGE = 60.0  # km/s
GAUSSIAN_FWHM = 2.0 * np.sqrt(2.0 * np.log(2.0))
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
    weights = _depths(wavelength, np.asarray(predicted_width, float))
    pieces = [_Piece.of(order) for order in spectrum.orders()]
    covered = _covered(pieces, wavelength)
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
    profile = _mean(_stack(pieces, wavelength, weights, grid, smooth=SMOOTHING), slice(None))
    peak, significance = _peak(spectrum, grid, profile)
    near = peak + np.arange(-PROFILE_HALF_RANGE, PROFILE_HALF_RANGE + 0.25, 0.5)
    stack = _stack(pieces, wavelength, weights, near)
    value, fwhm, depth = centre_of(near, _mean(stack, slice(None)))
    if not np.isfinite(value) or abs(value - peak) > 10.0:
        raise SpectrumError(
            f"{spectrum.path or spectrum.star}: the peak at {peak:.0f} km/s has no profile that can be fitted: lines "
            "wider than 60 km/s, or not a star of iron lines.",
            path=spectrum.path,
            value=peak,
        )
    error = _jackknife(near, stack, np.arange(wavelength.size), N_GROUPS)
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


def rough_level(wavelength: np.ndarray, flux: np.ndarray, good: np.ndarray) -> np.ndarray:
    """Upper envelope of one order: percentiles of pieces, joined by lines; for the velocity and for figures only."""
    if not good.any():
        return np.ones(flux.size)
    n_pieces = max(1, round((wavelength[-1] - wavelength[0]) / LEVEL_PIECE))
    place = np.minimum(
        ((wavelength - wavelength[0]) / (wavelength[-1] - wavelength[0]) * n_pieces).astype(int), n_pieces - 1
    )
    centres, levels = [], []
    for number in range(n_pieces):
        of = (place == number) & good
        if of.sum() >= 10:
            centres.append(wavelength[of].mean())
            levels.append(np.percentile(flux[of], LEVEL_PERCENTILE))
    if not centres:
        return np.full(flux.size, max(float(np.percentile(flux[good], LEVEL_PERCENTILE)), np.finfo(float).tiny))
    level = np.interp(wavelength, centres, levels)
    floor = 0.05 * np.median(levels)
    return np.maximum(level, floor if floor > 0.0 else np.finfo(float).tiny)


def centre_of(velocity: np.ndarray, profile: np.ndarray) -> tuple[float, float, float]:
    """Centre, full width at half maximum [km/s] and depth of a profile: Gaussian plus sloping baseline.

    Returns nan where nothing can be fitted.

    Examples
    --------
    >>> v = np.arange(-50.0, 50.0, 0.5)
    >>> [round(x, 2) for x in centre_of(v, 0.4 * np.exp(-0.5 * ((v - 3.2) / 4.0) ** 2))]
    [3.2, 9.42, 0.4]
    """
    usable = np.isfinite(profile)
    if usable.sum() < 10:
        return float("nan"), float("nan"), float("nan")
    base = float(np.percentile(profile[usable], 20.0))
    middle = np.abs(velocity - velocity.mean()) < 0.35 * (velocity[-1] - velocity[0])
    top = int(np.argmax(np.where(usable & middle, profile, -np.inf)))
    half = 0.5 * (profile[top] + base)
    left = top - int(np.argmax(~(profile[top::-1] > half)))
    right = top + int(np.argmax(~(profile[top:] > half)))
    fwhm = max(float(velocity[min(right, velocity.size - 1)] - velocity[max(left, 0)]), 2.0)
    centre, height, slope = float(velocity[top]), float(profile[top] - base), 0.0
    sigma = fwhm / GAUSSIAN_FWHM
    for _ in range(25):
        near = usable & (np.abs(velocity - centre) < FIT_HALF_WIDTH * GAUSSIAN_FWHM * sigma)
        if near.sum() < 6:
            return float("nan"), float("nan"), float("nan")
        x = velocity[near] - centre
        shape = np.exp(-0.5 * (x / sigma) ** 2)
        model = base + slope * x + height * shape
        design = np.stack(
            [np.ones(x.size), x, shape, height * shape * x / sigma**2, height * shape * x**2 / sigma**3], 1
        )
        step, *_ = np.linalg.lstsq(design, profile[near] - model, rcond=None)
        base, slope, height = base + step[0], slope + step[1], height + step[2]
        move, widen = float(np.clip(step[3], -sigma, sigma)), float(np.clip(step[4], -0.3 * sigma, 0.3 * sigma))
        base += slope * move
        centre, sigma = centre + move, sigma + widen
        if abs(move) < 1e-5 and abs(widen) < 1e-4:
            break
    if not (velocity[0] < centre < velocity[-1]) or height <= 0.0:
        return float("nan"), float("nan"), float("nan")
    return centre, float(GAUSSIAN_FWHM * sigma), float(height)


@dataclass(frozen=True, eq=False)
class _Piece:
    """One order with its depths, ready to be looked up at any wavelength."""

    number: int
    wavelength: np.ndarray
    depth: np.ndarray
    variance: np.ndarray
    good: np.ndarray

    @classmethod
    def of(cls, order: Spectrum) -> _Piece:
        good = order.good
        level = rough_level(order.wavelength_air, order.flux, good)
        depth = np.clip(1.0 - order.flux / level, *DEPTH_LIMITS)
        return cls(
            number=int(order.order[0]),
            wavelength=order.wavelength_air,
            depth=np.where(good, depth, 0.0),
            variance=(order.sigma / level) ** 2,
            good=good.astype(float),
        )

    def smoothed(self, sigma_kms: float) -> _Piece:
        """Convolved with a Gaussian [km/s]; gaps stay gaps."""
        from scipy.ndimage import gaussian_filter1d

        step = np.median(np.diff(self.wavelength)) / np.median(self.wavelength) * LIGHT_SPEED_KMS
        width = sigma_kms / step
        share = gaussian_filter1d(self.good, width)
        depth = gaussian_filter1d(self.depth * self.good, width) / np.maximum(share, 1e-9)
        return _Piece(self.number, self.wavelength, depth, self.variance, self.good)


def _depths(wavelength: np.ndarray, width_ma: np.ndarray) -> np.ndarray:
    in_velocity = np.maximum(np.nan_to_num(width_ma), 0.0) * 1e-3 / wavelength * LIGHT_SPEED_KMS
    return in_velocity / (in_velocity + LINE_VELOCITY)


def _covered(pieces: list[_Piece], wavelength: np.ndarray) -> np.ndarray:
    inside = np.zeros(wavelength.size, bool)
    for piece in pieces:
        inside |= (wavelength > piece.wavelength[0]) & (wavelength < piece.wavelength[-1])
    return inside


@dataclass(frozen=True, eq=False)
class _Stack:
    """Weighted depths of each line at each velocity, and the weights, shape (n_lines, n_velocities)."""

    weighted: np.ndarray
    weight: np.ndarray


def _stack(
    pieces: list[_Piece], wavelength: np.ndarray, weights: np.ndarray, velocity: np.ndarray, smooth: float = 0.0
) -> _Stack:
    at = wavelength[:, None] * (1.0 + velocity / LIGHT_SPEED_KMS)
    weighted, weight = np.zeros(at.shape), np.zeros(at.shape)
    for piece in pieces:
        source = piece.smoothed(smooth) if smooth else piece
        depth = np.interp(at, source.wavelength, source.depth, left=0.0, right=0.0)
        share = np.interp(at, source.wavelength, source.good, left=0.0, right=0.0)
        noise = np.interp(wavelength, source.wavelength, source.variance)[:, None]
        part = np.where(share > 0.99, weights[:, None] / (noise + BLEND_NOISE**2), 0.0)
        weighted += part * depth
        weight += part
    return _Stack(weighted, weight)


def _mean(stack: _Stack, rows) -> np.ndarray:
    total = stack.weight[rows].sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(total > 0.0, stack.weighted[rows].sum(axis=0) / total, np.nan)


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


def _jackknife(velocity: np.ndarray, stack: _Stack, rows: np.ndarray, n_groups: int) -> float:
    """Error of the centre of the mean profile of some lines; nan with fewer than three groups that can be fitted."""
    rows = rows[stack.weight[rows].sum(axis=1) > 0.0]
    n_groups = min(n_groups, rows.size)
    if n_groups < 3:
        return float("nan")
    total, weight = stack.weighted[rows].sum(axis=0), stack.weight[rows].sum(axis=0)
    centres = []
    for group in range(n_groups):
        out = rows[group::n_groups]
        left = weight - stack.weight[out].sum(axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            profile = np.where(left > 0.0, (total - stack.weighted[out].sum(axis=0)) / left, np.nan)
        centres.append(centre_of(velocity, profile)[0])
    centres = np.array(centres)
    centres = centres[np.isfinite(centres)]
    n = centres.size
    return float(np.sqrt((n - 1) / n * np.sum((centres - centres.mean()) ** 2))) if n >= 3 else float("nan")


def _groups(velocity: np.ndarray, stack: _Stack, wavelength: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Velocities of parts of the list, in order of wavelength."""
    rows = np.flatnonzero(stack.weight.sum(axis=1) > 0.0)
    rows = rows[np.argsort(wavelength[rows], kind="stable")]
    n_groups = min(N_DRIFT_GROUPS, rows.size // LEAST_LINES)
    found = []
    for part in np.array_split(rows, n_groups) if n_groups >= 2 else []:
        value = centre_of(velocity, _mean(stack, part))[0]
        error = _jackknife(velocity, stack, part, N_DRIFT_GROUPS)
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
    pieces: list[_Piece], wavelength: np.ndarray, weights: np.ndarray, velocity: np.ndarray, common: float
) -> dict[int, float]:
    """Orders with a velocity of their own that is far from the common one [km/s]."""
    off = {}
    for piece in pieces:
        stack = _stack([piece], wavelength, weights, velocity)
        rows = np.flatnonzero(stack.weight.sum(axis=1) > 0.0)
        if rows.size < LEAST_LINES // 2:
            continue
        value = centre_of(velocity, _mean(stack, rows))[0]
        error = _jackknife(velocity, stack, rows, rows.size)
        if np.isfinite(value) and error > 0.0 and abs(value - common) > max(ORDER_SHIFT, 5.0 * error):
            off[piece.number] = float(value - common)
    return off
