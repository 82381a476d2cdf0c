"""The motion of the observatory: limits known on paper, and headers that do not allow a correction."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.spectrum.barycentre import correction

PLACE = {"OBS-LAT": 41.5, "OBS-LONG": -21.0, "OBS-ELEV": 1180.0}
EQUINOX = "2019-03-20T22:00:00"
EARTH_SPEED = 29.8  # km/s, mean orbital speed; at the equinox the radial part and rotation add at most 0.7


@pytest.mark.parametrize(("right_ascension", "sign"), [(270.0, 1.0), (90.0, -1.0)])
def test_ahead_and_behind_of_the_earth(right_ascension, sign):
    """In March the Earth moves towards the ecliptic longitude of 270 degrees."""
    value, reason = correction({**PLACE, "DATE-OBS": EQUINOX, "RA": right_ascension, "DEC": -sign * 23.44})
    assert value == pytest.approx(sign * EARTH_SPEED, abs=0.8)
    assert "observed wavelengths are taken" in reason


def test_at_the_pole_of_the_ecliptic_little_is_left():
    value, reason = correction({**PLACE, "DATE-OBS": EQUINOX, "RA": 270.0, "DEC": 66.56, "SPECSYS": "TOPOCENT"})
    assert abs(value) < 0.5  # the rotation of the Earth
    assert "does not say so" not in reason


def test_coordinates_and_times_in_words():
    numbers = correction({**PLACE, "MJD-OBS": 58562.9, "EXPTIME": 1200.0, "RA": 219.902, "DEC": -60.834})
    words = correction({**PLACE, "MJD-OBS": 58562.9, "EXPTIME": 1200.0, "RA": "14:39:36.5", "DEC": "-60:50:02"})
    assert numbers[0] == pytest.approx(words[0], abs=1e-3)


def test_headers_that_do_not_allow_it():
    value, reason = correction({"RA": 10.0, "DEC": 3.0})
    assert np.isnan(value)
    assert reason == "no barycentric correction: the header lacks place, time"
    value, reason = correction({**PLACE, "DATE-OBS": "a day in Mayday", "RA": 1.0, "DEC": 2.0})
    assert np.isnan(value)
    value, reason = correction({**PLACE, "DATE-OBS": "2019-13-45T00:00:00", "RA": 1.0, "DEC": 2.0})
    assert np.isnan(value)
    assert "cannot be understood" in reason


def test_headers_that_are_corrected_already():
    assert correction({"SPECSYS": "BARYCENT"})[0] == 0.0
    assert "Sun" in correction({"SPECSYS": "HELIOCEN"})[1]
