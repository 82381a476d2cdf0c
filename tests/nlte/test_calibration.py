"""Calibration of S_H: the likelihood curve, its summary, and the frozen value."""

import numpy as np
import pytest

from specsolve.nlte.calibration import STARS, WEAK_CHI2, Curve, describe, likelihood_curve, star_lines
from specsolve.nlte.recipe import HYDROGEN_FACTOR


def parabola(width: float) -> Curve:
    x = np.arange(-1.5, 1.01, 0.25)
    offsets = np.zeros((2, x.size))
    chi2 = ((x - 0.1) / width) ** 2
    return Curve(log_factor=x, offsets=offsets, lte=np.zeros(2), errors=np.ones(2), chi2_stars=chi2, chi2=chi2)


def test_summary_of_a_curve():
    curve = parabola(0.5)
    assert abs(curve.best - 0.1) < 1e-9
    assert abs(curve.contrast - (np.log10(3.0) / 0.5) ** 2) < 0.1
    assert "weakly constrained" in describe(curve)
    assert "weakly constrained" not in describe(parabola(0.1))


def test_lines_of_the_calibration_stars():
    counts = {star.name: np.unique(star_lines(star)[0].ion, return_counts=True)[1].tolist() for star in STARS}
    assert counts["HD 122563"][0] > 50
    assert counts["HD 122563"][1] > 10
    assert counts["Sun"][0] > 50


@pytest.mark.slow
def test_the_frozen_value_lies_where_the_likelihood_is_high(figure):
    curve = likelihood_curve()
    at_frozen = np.interp(np.log10(HYDROGEN_FACTOR), curve.log_factor, curve.chi2)
    giant = np.interp(np.log10(HYDROGEN_FACTOR), curve.log_factor, curve.offsets[0])
    sun = np.interp(np.log10(HYDROGEN_FACTOR), curve.log_factor, curve.offsets[1])
    figure("best S_H", 10.0**curve.best)
    figure("rise of chi squared over a factor 3", curve.contrast, limit=f"{WEAK_CHI2:g}, or said to be weak")
    figure("ionization offset of HD 122563 in LTE", curve.lte[0], "dex", source="Soubiran et al. 2024")
    figure("ionization offset of HD 122563 in NLTE", giant, "dex", limit="0.06", source="Soubiran et al. 2024")
    figure("its change from LTE to NLTE", giant - curve.lte[0], "dex", limit=">= 0.08")
    figure("ionization offset of the Sun in NLTE", sun, "dex", limit="0.03")
    assert at_frozen - curve.chi2.min() < 1.0
    assert abs(giant) < 0.06
    assert giant - curve.lte[0] >= 0.08
    assert abs(sun) < 0.03
