"""From raw columns to a `Spectrum`: units, air, order of wavelengths, gaps, errors, level; every decision is a note."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.errors import SpectrumError
from specsolve.lines.wavelengths import LIMITS_ANGSTROM, vacuum_to_air

from .noise import estimate_noise
from .raw import AIR, LOG_UNIT, VACUUM, Raw, RawPiece, ReadOptions, unit_name
from .types import Spectrum

PLAUSIBLE_ANGSTROM = (2900.0, 25000.0)
"""Where ground-based spectra of iron lines lie; medians outside it point to another unit."""
UNIT_HINTS = ((290.0, 2500.0, "nm"), (0.29, 2.5, "micron"), (3.46, 4.4, "log10(Angstrom)"))
"""Median wavelength (low, high) in a unit that the file does not state, and what it probably is."""
LEAST_PIXELS = 50
"""Fewer pixels in an order cannot hold a line and its continuum."""
LEAST_USABLE = 0.05
"""Smallest usable part of the pixels."""
MOST_ORDERS = 200
ORDER_LEAST_PIXELS = 100
"""Columns whose wavelength jumps back are taken for orders if each piece is at least this long."""
LEVEL_CHUNKS = 20
LEVEL_PERCENTILE = 90.0
NORMALISED_LEVELS = (0.75, 1.35)
"""90th percentile of the flux in pieces of a normalised spectrum: noise lifts it, lines lower it."""
NORMALISED_SHARE = 0.7
"""Share of the pieces that must be at that level."""


def assemble(raw: Raw, path: str | Path, options: ReadOptions) -> Spectrum:
    """Check the columns of a file and make a `Spectrum` of them.

    Raises
    ------
    SpectrumError
        With one sentence that tells what is wrong and what helps.
    """
    notes = list(raw.notes)
    factor, logarithmic = _unit(raw, path, options)
    medium, air_source = _medium(raw, options, notes)
    pieces = []
    for piece in raw.pieces:
        pieces += _orders_of(piece, path, notes)
    pieces = [_prepared(piece, factor, logarithmic) for piece in pieces]
    short = sum(piece.flux.size < LEAST_PIXELS for piece in pieces)
    pieces = [piece for piece in pieces if piece.flux.size >= LEAST_PIXELS]
    if not pieces:
        raise SpectrumError(f"{path}: fewer than {LEAST_PIXELS} pixels: not a spectrum.", path=path)
    if short:
        notes.append(f"{short} orders with fewer than {LEAST_PIXELS} pixels left out")
    if len(pieces) > MOST_ORDERS:
        raise SpectrumError(
            f"{path}: {len(pieces)} orders; at most {MOST_ORDERS} are believed. Give one star a file.", path=path
        )
    pieces.sort(key=lambda piece: float(piece.wavelength[0]))
    wavelength = np.concatenate([piece.wavelength for piece in pieces])
    _check_range(wavelength, path)
    if medium == VACUUM:
        wavelength = vacuum_to_air(wavelength)
    flux = np.concatenate([piece.flux for piece in pieces])
    order = np.repeat(np.arange(len(pieces)), [piece.flux.size for piece in pieces])
    mask = np.concatenate([_mask(piece) for piece in pieces])
    _check_light(flux, mask, path, notes)
    normalised = is_normalised(flux, mask, order) if options.normalised is None else options.normalised
    if options.normalised and not is_normalised(flux, mask, order):
        notes.append("said to be normalised, but its upper envelope is not near 1: the continuum is fitted freely")
        normalised = False
    power = options.resolving_power if options.resolving_power else resolving_power(raw.header)
    per_fwhm = [pixels_per_fwhm(piece.wavelength, power) for piece in pieces]
    sigma, mask, sigma_source, correlation = _errors(pieces, flux, mask, order, per_fwhm, path, options, notes)
    spectrum = Spectrum(
        star=options.star or star_of(path),
        wavelength_air=wavelength,
        flux=np.where(mask, 0.0, flux),
        sigma=np.where(mask, 1.0, sigma),
        mask=mask,
        order=order,
        correlation=correlation,
        resolving_power=power,
        normalised=bool(normalised),
        sigma_source=sigma_source,
        air_source=air_source,
        notes=tuple(dict.fromkeys(notes)),
        header=dict(raw.header),
        path=str(path),
    )
    return spectrum


def star_of(path: str | Path) -> str:
    """Name of a star from its file: the stem, without a second suffix of compression.

    Examples
    --------
    >>> star_of("data/HD 1.fits.gz")
    'HD 1'
    """
    name = Path(path).name
    for suffix in (".gz", ".bz2", ".xz", ".Z"):
        name = name.removesuffix(suffix)
    return Path(name).stem


RESOLVING_KEYS = ("SPEC_RES", "SPECRP", "SPEC_RP", "RESOLVPW", "RESOLUTION", "RESOLVING_POWER", "R")
RESOLVING_LIMITS = (1000.0, 500000.0)


def resolving_power(header: Mapping[str, Any]) -> float:
    """lambda / FWHM that a header states; nan if none does.

    Examples
    --------
    >>> resolving_power({"SPEC_RES": 48000})
    48000.0
    """
    upper = {str(key).upper(): value for key, value in header.items()}
    for key in RESOLVING_KEYS:
        value = upper.get(key)
        try:
            number = float(value) if value is not None and not isinstance(value, bool) else float("nan")
        except (TypeError, ValueError):
            continue
        if RESOLVING_LIMITS[0] <= number <= RESOLVING_LIMITS[1]:
            return number
    return float("nan")


def pixels_per_fwhm(wavelength: np.ndarray, power: float) -> float:
    """Pixels in the width of the instrument's profile at the middle of an order; nan if the resolving power is.

    Examples
    --------
    >>> round(pixels_per_fwhm(np.arange(5000.0, 5100.0, 0.02), 50000.0), 2)
    5.05
    """
    return float(np.median(wavelength) / power / np.median(np.diff(wavelength)))


def is_normalised(flux: np.ndarray, mask: np.ndarray, order: np.ndarray) -> bool:
    """Whether the upper envelope of the usable flux is near 1 nearly everywhere."""
    levels = []
    for number in np.unique(order):
        values = flux[(order == number) & ~mask]
        for piece in np.array_split(values, max(1, LEVEL_CHUNKS // int(order.max() + 1))):
            if piece.size >= 10:
                levels.append(np.percentile(piece, LEVEL_PERCENTILE))
    low, high = NORMALISED_LEVELS
    levels = np.array(levels)
    return bool(levels.size and np.mean((levels > low) & (levels < high)) >= NORMALISED_SHARE)


def _unit(raw: Raw, path: str | Path, options: ReadOptions) -> tuple[float, bool]:
    """Factor to Angstrom, and whether wavelengths are logarithms."""
    stated = None if raw.unit_assumed else raw.unit
    unit = options.unit or raw.unit
    middle = float(np.nanmedian(np.concatenate([np.ravel(piece.wavelength) for piece in raw.pieces])))
    if unit is None:
        low, high = PLAUSIBLE_ANGSTROM
        if low <= middle <= high:
            return 1.0, False
        hint = next((name for least, most, name in UNIT_HINTS if least <= middle <= most), None)
        raise SpectrumError(
            f"{path}: wavelengths around {middle:.5g} without a unit"
            + (f" look like {hint}: say --wavelength-unit {hint}." if hint else ": say --wavelength-unit UNIT."),
            path=path,
            value=middle,
        )
    if unit.replace(" ", "") == LOG_UNIT:
        return 1.0, True
    from astropy import units as u

    try:
        factor = float(u.Unit(unit_name(unit)).to("Angstrom"))
    except (ValueError, TypeError, u.UnitConversionError) as error:
        raise SpectrumError(f"{path}: wavelengths in '{unit}', which is not a unit of length.", path=path) from error
    low, high = PLAUSIBLE_ANGSTROM
    if not low <= middle * factor <= high:
        hint = next((name for least, most, name in UNIT_HINTS if least <= middle <= most), "another unit")
        who = "the file says" if stated and not options.unit else "said to be" if options.unit else "taken as"
        raise SpectrumError(
            f"{path}: wavelengths around {middle:.5g} cannot be {unit} ({who} {unit}); they look like {hint}: "
            f"say --wavelength-unit {hint if hint != 'another unit' else 'UNIT'}.",
            path=path,
            value=middle,
        )
    return factor, False


def _medium(raw: Raw, options: ReadOptions, notes: list[str]) -> tuple[str, str]:
    if options.medium is not None:
        if raw.medium is not None and raw.medium != options.medium:
            notes.append(f"the file says {raw.medium} wavelengths, you say {options.medium}: yours counts")
        return options.medium, "said" if options.medium == AIR else "said vacuum, converted"
    if raw.medium is not None:
        return raw.medium, "header" if raw.medium == AIR else "header vacuum, converted"
    notes.append("neither file nor option says air or vacuum: air wavelengths assumed")
    return AIR, "assumed"


def _orders_of(piece: RawPiece, path: str | Path, notes: list[str]) -> list[RawPiece]:
    """Rows without a wavelength dropped, falling wavelengths turned round, jumps back cut into orders."""
    wavelength = np.asarray(piece.wavelength, float)
    known = np.isfinite(wavelength)
    if not known.all():
        notes.append(f"{int((~known).sum())} pixels without a wavelength left out")
        piece = _taken(piece, np.flatnonzero(known))
        wavelength = piece.wavelength
    if wavelength.size < 2:
        return [piece]
    step = np.diff(wavelength)
    if np.median(step) < 0.0:
        notes.append("wavelengths fall along the file: turned round")
        piece = _taken(piece, slice(None, None, -1))
        wavelength, step = piece.wavelength, -step[::-1]
    back = np.flatnonzero(~(step > 0.0))
    if back.size == 0:
        return [piece]
    parts = np.split(np.arange(wavelength.size), back + 1)
    if len(parts) > MOST_ORDERS or min(part.size for part in parts) < ORDER_LEAST_PIXELS:
        row = int(back[0]) + 1
        raise SpectrumError(
            f"{path}: wavelengths do not increase: {wavelength[row - 1]:.6g} is followed by {wavelength[row]:.6g} "
            f"(pixel {row + 1}, {back.size} such places). Sort the file, or give its orders an order column.",
            path=path,
            value=float(wavelength[row]),
        )
    notes.append(f"the wavelength jumps back {back.size} times: taken as {len(parts)} orders")
    return [_taken(piece, part) for part in parts]


def _taken(piece: RawPiece, index: Any) -> RawPiece:
    return RawPiece(
        wavelength=np.asarray(piece.wavelength, float)[index],
        flux=np.asarray(piece.flux, float)[index],
        sigma=None if piece.sigma is None else np.asarray(piece.sigma, float)[index],
        mask=None if piece.mask is None else np.asarray(piece.mask, bool)[index],
    )


def _prepared(piece: RawPiece, factor: float, logarithmic: bool) -> RawPiece:
    """Wavelengths in Angstrom."""
    wavelength = 10.0**piece.wavelength if logarithmic else piece.wavelength * factor
    return RawPiece(wavelength=wavelength, flux=piece.flux, sigma=piece.sigma, mask=piece.mask)


def _check_range(wavelength: np.ndarray, path: str | Path) -> None:
    low, high = LIMITS_ANGSTROM
    if wavelength.min() < low or wavelength.max() > high:
        raise SpectrumError(
            f"{path}: wavelengths from {wavelength.min():.6g} to {wavelength.max():.6g} Angstrom reach outside "
            f"{low:g} to {high:g}: cut the spectrum or check its unit.",
            path=path,
        )


def _mask(piece: RawPiece) -> np.ndarray:
    """Pixels without a number, exactly zero (gaps of detectors), or with an error that is none."""
    bad = ~np.isfinite(piece.flux) | (piece.flux == 0.0)
    if piece.mask is not None:
        bad |= piece.mask
    if piece.sigma is not None:
        usable = np.isfinite(piece.sigma) & (piece.sigma > 0.0)
        if usable.any():
            bad |= ~usable
    return bad


def _check_light(flux: np.ndarray, mask: np.ndarray, path: str | Path, notes: list[str]) -> None:
    share = float(np.mean(~mask))
    if share < LEAST_USABLE:
        raise SpectrumError(
            f"{path}: only {100.0 * share:.1f} % of the pixels hold a usable flux.", path=path, value=share
        )
    if share < 1.0:
        notes.append(f"{int(mask.sum())} of {mask.size} pixels without a usable flux are masked")
    level = float(np.median(flux[~mask]))
    if not level > 0.0:
        raise SpectrumError(
            f"{path}: the median flux is {level:.3g}: there is no light in it (wrong column, or the sky was "
            "subtracted twice).",
            path=path,
            value=level,
        )
    negative = float(np.mean(flux[~mask] < 0.0))
    if negative > 0.01:
        notes.append(f"{100.0 * negative:.0f} % of the pixels have a negative flux")


def _errors(
    pieces: list[RawPiece],
    flux: np.ndarray,
    mask: np.ndarray,
    order: np.ndarray,
    per_fwhm: list[float],
    path: str | Path,
    options: ReadOptions,
    notes: list[str],
) -> tuple[np.ndarray, np.ndarray, str, float]:
    """Errors of the pixels: said, of the file, or estimated; and the correlation of neighbouring pixels."""
    estimates, factors = np.full(flux.size, np.nan), []
    for number in np.unique(order):
        of = order == number
        estimates[of], factor = estimate_noise(flux[of], mask[of], per_fwhm[number])
        factors.append(factor)
    correlation = float(np.median(factors))
    if correlation > 1.2:
        notes.append(f"neighbouring pixels are correlated (a sum varies {correlation:.1f} times as much): taken along")
    if options.signal_to_noise is not None:
        level = np.full(flux.size, np.nan)
        for number in np.unique(order):
            of = order == number
            level[of] = np.percentile(flux[of & ~mask], LEVEL_PERCENTILE) if (of & ~mask).any() else np.nan
        sigma = level / options.signal_to_noise
        return sigma, mask | ~(sigma > 0.0), "said", correlation
    if all(piece.sigma is not None and np.any(piece.sigma > 0.0) for piece in pieces):
        sigma = np.concatenate([piece.sigma for piece in pieces])
        known = ~mask & np.isfinite(estimates)
        ratio = float(np.median(estimates[known] / sigma[known])) if known.any() else 1.0
        if ratio > 3.0:
            notes.append(f"the pixels scatter {ratio:.1f} times as much as the errors of the file allow")
        return sigma, mask, "file", correlation
    notes.append("the file has no errors: estimated from the scatter of the pixels")
    sigma = estimates
    if not np.isfinite(sigma).any():
        raise SpectrumError(
            f"{path}: no errors in the file, and its pixels show no noise to estimate them from: say --signal-to-noise.",
            path=path,
        )
    return sigma, mask | ~(sigma > 0.0), "estimated", correlation
