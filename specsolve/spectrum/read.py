"""Read a spectrum from a file: the only place that knows specutils.

Images and tables of flux with a unit go through specutils; the small reader of `read_table` takes what specutils does
not recognise. The file itself, not the reader, decides about units, logarithmic steps, air and vacuum.
"""

from __future__ import annotations

import gzip
import warnings
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.errors import SpectrumError

from .pixels import assemble
from .raw import LOG_UNIT, Raw, RawPiece, ReadOptions, unit_name
from .read_table import columns_of, medium_of, plain_header, read_text, table_to_raw
from .types import Spectrum

GZIP_MAGIC = b"\x1f\x8b"
FITS_MAGIC = b"SIMPLE  ="
ECSV_MAGIC = b"# %ECSV"
HEAD_BYTES = 80
IMAGE_FORMAT = "wcs1d-fits"
"""The name that specutils gives to images with a wavelength axis."""
LOG_FLAG = "DC-FLAG"
"""Keyword that is 1 where CRVAL1 and CDELT1 are decimal logarithms (common practice, no source)."""


def read_spectrum(path: str | Path, options: ReadOptions | None = None) -> Spectrum:
    """Read one spectrum, with all its orders.

    Parameters
    ----------
    path : path-like
        FITS image (linear or logarithmic steps) or table, ECSV, or text of two or three columns.
    options : ReadOptions, optional
        What the user says beyond the file.

    Returns
    -------
    Spectrum
        In air wavelengths; `notes` tell every decision.

    Raises
    ------
    SpectrumError

    Examples
    --------
    >>> spectrum = read_spectrum("star.fits")                                  # doctest: +SKIP
    """
    path = Path(path)
    options = options or ReadOptions()
    head = _head(path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # readers comment on old units; what matters ends as an error here
        if head.startswith(FITS_MAGIC):
            raw = _read_fits(path, options)
        elif head.startswith(ECSV_MAGIC):
            raw = _read_ecsv(path, options)
        elif b"\x00" in head:
            raise SpectrumError(f"{path}: neither FITS nor text.", path=path)
        else:
            raw = table_to_raw(read_text(path), options.columns, path)
    return assemble(raw, path, options)


def _head(path: Path) -> bytes:
    """First bytes of a file, unpacked if it is gzipped."""
    try:
        with path.open("rb") as stream:
            head = stream.read(HEAD_BYTES)
        if head.startswith(GZIP_MAGIC):
            with gzip.open(path, "rb") as stream:
                head = stream.read(HEAD_BYTES)
    except FileNotFoundError as error:
        raise SpectrumError(f"{path}: no such file.", path=path) from error
    except (OSError, EOFError) as error:
        raise SpectrumError(f"{path}: cannot be read ({_words(error)}).", path=path) from error
    if not head:
        raise SpectrumError(f"{path}: the file is empty.", path=path)
    return head


def _read_fits(path: Path, options: ReadOptions) -> Raw:
    from astropy.io import fits
    from astropy.table import Table

    try:
        with fits.open(path, memmap=False) as units:
            _complete(path, units)
            header = {}
            for unit in units[:2]:
                header.update(plain_header(unit.header))
            with_data = [i for i, unit in enumerate(units) if unit.data is not None and unit.data.size]
            if not with_data:
                raise SpectrumError(f"{path}: no data in it.", path=path)
            first = with_data[0]
            unit = units[first]
            if isinstance(unit, (fits.BinTableHDU, fits.TableHDU)):
                return _read_fits_table(path, Table.read(unit), header, options)
            shape = unit.data.shape
            header.update(plain_header(unit.header))
            sigma = _sigma_unit(units, max(shape))
            row = _one_row(unit)
    except SpectrumError:
        raise
    except Exception as error:  # a damaged file makes astropy raise whatever it meets
        raise SpectrumError(f"{path}: damaged FITS file ({_words(error)}).", path=path) from error
    if sum(size > 1 for size in shape) != 1:
        return _read_orders(path, shape, header)
    return _read_image(path, header, max(shape), row, sigma)


def _complete(path: Path, units: Any) -> None:
    """A file that is shorter than its headers say is refused: astropy would fill it up or give a part."""
    size = path.stat().st_size
    if path.suffix == ".gz" or size == 0:
        for unit in units:
            _ = unit.data  # a cut gzip stream raises here
        return
    need = max(info["datLoc"] + info["datSpan"] for info in (unit.fileinfo() for unit in units))
    if size < need:
        raise SpectrumError(
            f"{path}: truncated FITS file: {size} bytes of {need}. Copy it again.", path=path, value=float(size)
        )


ERROR_NAMES = {"ERR", "ERROR", "ERRS", "SIGMA", "STD", "STDDEV", "UNCERT", "UNCERTAINTY"}
INVERSE_VARIANCE_NAMES = {"IVAR"}
"""Names of image extensions with errors (common practice, no source)."""


def _sigma_unit(units: Any, n_pixels: int) -> np.ndarray | None:
    """Errors from an image extension that is named so."""
    for unit in units[1:]:
        name = unit.name.strip().upper()
        if name in ERROR_NAMES | INVERSE_VARIANCE_NAMES and unit.data is not None and unit.data.size == n_pixels:
            values = np.asarray(unit.data, float).ravel()
            if name in ERROR_NAMES:
                return values
            with np.errstate(divide="ignore", invalid="ignore"):
                return 1.0 / np.sqrt(values)
    return None


def _one_row(unit: Any) -> Any:
    """The image alone, axes of one pixel dropped: specutils stumbles over names of extensions that it does not know."""
    from astropy.io import fits

    header = unit.header.copy()
    for key in [key for key in header if key[:-1] in ("CTYPE", "CUNIT", "CRVAL", "CDELT", "CRPIX") and key[-1] != "1"]:
        del header[key]
    if header.get("CUNIT1"):
        header["CUNIT1"] = unit_name(str(header["CUNIT1"]))
    return fits.HDUList([fits.PrimaryHDU(np.ravel(unit.data), header)])


def _read_image(path: Path, header: dict[str, Any], n_pixels: int, row: Any, sigma: np.ndarray | None) -> Raw:
    """A one-dimensional image with linear or logarithmic steps, by specutils."""
    if not any(key in header for key in ("CDELT1", "CD1_1")) or "CRVAL1" not in header:
        raise SpectrumError(f"{path}: no wavelengths in the header (CRVAL1 and CDELT1 are missing).", path=path)
    found = _by_specutils(path, row, IMAGE_FORMAT)
    axis = np.asarray(found.spectral_axis.value, float).ravel()
    unit: str | None = str(found.spectral_axis.unit)
    stated = unit_name(str(header.get("CUNIT1", "")))
    if stated and stated != unit and not stated.lower().startswith("log"):
        try:
            axis, unit = np.asarray(found.spectral_axis.to_value(stated), float).ravel(), stated
        except (ValueError, TypeError) as error:
            raise SpectrumError(f"{path}: CUNIT1 = '{stated}' is not a unit of length.", path=path) from error
    flux = np.asarray(found.flux.value, float).ravel()
    if flux.size != n_pixels or axis.size != n_pixels:
        raise SpectrumError(f"{path}: {flux.size} flux values for {axis.size} wavelengths.", path=path)
    if str(header.get(LOG_FLAG, "")).strip() == "1" or stated.lower().startswith("log"):
        unit = LOG_UNIT
    elif not stated:
        unit = None
    piece = RawPiece(wavelength=axis, flux=flux, sigma=_sigma(found) if sigma is None else sigma, mask=_mask(found))
    return Raw(pieces=[piece], unit=unit, medium=medium_of(header), header=header)


def _read_orders(path: Path, shape: tuple[int, ...], header: dict[str, Any]) -> Raw:
    """A two-dimensional image is read only if specutils knows a wavelength for each of its rows."""
    from specutils import SpectrumCollection, SpectrumList
    from specutils.io.registers import identify_spectrum_format

    words = " x ".join(str(size) for size in shape)
    refusal = (
        f"{path}: a {len(shape)}-dimensional image ({words} pixels), not a spectrum. Extract it first, or give one "
        "file an order."
    )
    try:
        names = identify_spectrum_format(str(path), SpectrumList)
        names = [names] if isinstance(names, str) else list(names)
        if not names or names == [IMAGE_FORMAT]:
            raise SpectrumError(refusal, path=path)
        found = SpectrumList.read(str(path), format=names[0])
        members = [one for item in found for one in (item if isinstance(item, SpectrumCollection) else [item])]
        if any(one.flux.ndim != 1 for one in members):
            raise SpectrumError(refusal, path=path)
        pieces = [
            RawPiece(
                wavelength=np.asarray(one.spectral_axis.to_value("Angstrom"), float),
                flux=np.asarray(one.flux.value, float),
                sigma=_sigma(one),
                mask=_mask(one),
            )
            for one in members
        ]
    except SpectrumError:
        raise
    except Exception as error:  # readers of many formats raise whatever they meet
        raise SpectrumError(refusal, path=path) from error
    return Raw(pieces=pieces, unit="Angstrom", medium=medium_of(header), header=header)


def _read_fits_table(path: Path, table: Any, header: dict[str, Any], options: ReadOptions) -> Raw:
    table.meta = {**header, **table.meta}
    return _read_table(path, table, options)


def _read_ecsv(path: Path, options: ReadOptions) -> Raw:
    from astropy.table import Table

    try:
        table = Table.read(path, format="ascii.ecsv")
    except Exception as error:  # the reader raises whatever it meets in a damaged file
        raise SpectrumError(f"{path}: not a readable ECSV table ({_words(error)}).", path=path) from error
    return _read_table(path, table, options)


def _read_table(path: Path, table: Any, options: ReadOptions) -> Raw:
    """Flux without a unit, orders, masks and named columns: own reader. Else specutils, and what it leaves again."""
    names = columns_of(table, options.columns, path)
    own = "flux" in names and (table[names["flux"]].unit is None or table[names["flux"]].unit.is_equivalent(""))
    own |= bool({"order", "mask"} & set(names)) or bool(options.columns)
    own |= any(table[name].ndim > 1 for name in names.values())
    if not own:
        try:
            found = _by_specutils(path)
        except SpectrumError:
            return table_to_raw(table, options.columns, path)
        axis = np.atleast_1d(np.asarray(found.spectral_axis.to_value("Angstrom"), float))
        if found.flux.ndim == 1:
            piece = RawPiece(
                wavelength=axis, flux=np.asarray(found.flux.value, float), sigma=_sigma(found), mask=_mask(found)
            )
            medium = medium_of(table.meta)
            if "wavelength" in names:
                medium = {"wavelength_air": "air", "wavelength_vacuum": "vacuum"}.get(
                    names["wavelength"].lower(), medium
                )
            return Raw(pieces=[piece], unit="Angstrom", medium=medium, header=plain_header(table.meta))
    return table_to_raw(table, options.columns, path)


def _by_specutils(path: Path, row: Any = None, kind: str | None = None) -> Any:
    """One `specutils` spectrum of a file, or of an image in memory."""
    try:
        from specutils import Spectrum as Found
    except ImportError:  # its name before specutils 2
        from specutils import Spectrum1D as Found
    try:
        return Found.read(str(path) if row is None else row, format=kind)
    except Exception as error:  # readers of many formats raise whatever they meet
        raise SpectrumError(f"{path}: not a spectrum that can be read ({_words(error)}).", path=path) from error


def _sigma(found: Any) -> np.ndarray | None:
    if found.uncertainty is None:
        return None
    from astropy.nddata import StdDevUncertainty

    values = np.asarray(found.uncertainty.represent_as(StdDevUncertainty).array, float).ravel()
    return values if values.size == found.flux.size else None


def _mask(found: Any) -> np.ndarray | None:
    return None if found.mask is None else np.asarray(found.mask).astype(bool).ravel()


def _words(error: Exception) -> str:
    """First line of what an error says, without its path."""
    text = getattr(error, "strerror", None) or str(error)
    return " ".join((text.splitlines() or [type(error).__name__])[0].split())[:120] or type(error).__name__
