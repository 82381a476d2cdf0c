"""Motion of the observatory towards the star, where the header of the spectrum holds what is needed."""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from contextlib import ExitStack
from typing import Any

LATITUDE_KEYS = ("OBS-LAT", "LAT-OBS", "ESO TEL GEOLAT", "GEOLAT", "SITELAT")
LONGITUDE_KEYS = ("OBS-LONG", "LONG-OBS", "ESO TEL GEOLON", "GEOLON", "SITELONG")
HEIGHT_KEYS = ("OBS-ELEV", "ALT-OBS", "ESO TEL GEOELEV", "GEOELEV", "SITEALT")
"""Geodetic degrees (east positive) and metres; headers differ (common practice, no source)."""
CORRECTED = {"BARYCENT": "barycentre", "HELIOCEN": "Sun"}
"""SPECSYS of the FITS standard where the correction is already in (Greisen et al. 2006, A&A 446, 747)."""


def correction(header: Mapping[str, Any]) -> tuple[float, str]:
    """Velocity to add to a measured one [km/s], and how it was found; nan with the reason where the header does not allow.

    Parameters
    ----------
    header : mapping
        SPECSYS; RA and DEC; DATE-OBS or MJD-OBS with EXPTIME; OBSGEO-X, -Y, -Z or latitude, longitude and height.

    Returns
    -------
    value : float
    reason : str

    Examples
    --------
    >>> correction({"SPECSYS": "BARYCENT"})
    (0.0, 'the header says that the wavelengths are those at the barycentre')
    """
    upper = {str(key).upper(): value for key, value in header.items()}
    system = str(upper.get("SPECSYS", "")).strip().upper()
    if system in CORRECTED:
        return 0.0, f"the header says that the wavelengths are those at the {CORRECTED[system]}"
    from astropy import units as u
    from astropy.coordinates import SkyCoord
    from astropy.time import TimeDelta
    from astropy.utils import iers

    nan = float("nan")
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # dates to come are "dubious" to the library
        try:
            place, time, star = _place(upper), _time(upper), _coordinates(upper)
        except (ValueError, TypeError) as error:
            words = " ".join(str(error).split())
            return nan, f"no barycentric correction: the header cannot be understood ({words})"
    missing = [name for name, value in (("place", place), ("time", time), ("RA and DEC", star)) if value is None]
    if missing:
        return nan, f"no barycentric correction: the header lacks {', '.join(missing)}"
    exposure = upper.get("EXPTIME", 0.0)
    offline = {"auto_download": False, "auto_max_age": None, "iers_degraded_accuracy": "ignore"}
    with warnings.catch_warnings(), ExitStack() as settings:
        warnings.simplefilter("ignore")  # rotation of the Earth to 1 s is good to 1 cm/s
        for name, value in offline.items():
            settings.enter_context(iers.conf.set_temp(name, value))
        middle = time + TimeDelta(0.5 * float(exposure or 0.0) * u.s)
        value = SkyCoord(*star, unit="deg").radial_velocity_correction(obstime=middle, location=place)
    said = "" if system == "TOPOCENT" else "; the header does not say so, but observed wavelengths are taken"
    return float(value.to_value("km/s")), f"from place, middle of the exposure and coordinates in the header{said}"


def _place(header: Mapping[str, Any]) -> Any:
    from astropy import units as u
    from astropy.coordinates import EarthLocation

    if all(f"OBSGEO-{axis}" in header for axis in "XYZ"):
        return EarthLocation.from_geocentric(*(float(header[f"OBSGEO-{axis}"]) for axis in "XYZ"), unit=u.m)
    found = [next((header[key] for key in keys if key in header), None) for keys in (LONGITUDE_KEYS, LATITUDE_KEYS)]
    if any(value is None for value in found):
        return None
    height = next((float(header[key]) for key in HEIGHT_KEYS if key in header), 0.0)
    return EarthLocation.from_geodetic(_degrees(found[0]), _degrees(found[1]), height)


def _time(header: Mapping[str, Any]) -> Any:
    from astropy.time import Time

    if "MJD-OBS" in header:
        return Time(float(header["MJD-OBS"]), format="mjd", scale="utc")
    date = str(header.get("DATE-OBS", "")).strip()
    if "T" not in date and date and header.get("UT"):
        date = f"{date}T{str(header['UT']).strip()}"
    return Time(date, scale="utc") if "T" in date else None


def _coordinates(header: Mapping[str, Any]) -> tuple[float, float] | None:
    if header.get("RA") is None or header.get("DEC") is None:
        return None
    right_ascension = header["RA"]
    hours = isinstance(right_ascension, str) and len(right_ascension.replace(":", " ").split()) == 3
    return _degrees(right_ascension) * (15.0 if hours else 1.0), _degrees(header["DEC"])


def _degrees(value: Any) -> float:
    """A number, or degrees (hours), minutes and seconds."""
    words = str(value).replace(":", " ").split()
    if len(words) == 3:
        sign = -1.0 if words[0].startswith("-") else 1.0
        return sign * (abs(float(words[0])) + float(words[1]) / 60.0 + float(words[2]) / 3600.0)
    return float(value)
