"""Bias, errors and flags of widths on computed spectra whose truth the fit does not know (`trials`).

Per resolving power and signal to noise, over lines whose true width exceeds six times their noise (a cut on the truth,
so that no selection by the measured width shifts the mean) and that carry no spoiling flag.
"""

import os

import numpy as np
import pytest

from specsolve.spectrum import types as t
from specsolve.spectrum.flags import SPOILING
from specsolve.spectrum.profiles import photon_error
from tests.spectrum import trials

pytestmark = pytest.mark.timeout(5400)
RESOLVING_POWERS = (20000.0, 50000.0, 115000.0)
SIGNALS = (30.0, 100.0, 300.0)
N_STARS = 16
LEAST_DRAWS = 1000
HARM_PART, HARM_SIGMA = 0.10, 3.0
"""A blend harms if the width is off by more than this part and this many sigma of noise and continuum."""


def robust_width(values: np.ndarray) -> float:
    """1.4826 times the median absolute deviation from the median."""
    return float(1.4826 * np.median(np.abs(values - np.median(values))))


@pytest.fixture(scope="module")
def draws(slow_fraction):
    """All trials: resolving power, S/N, truth, width, errors, flags, full width; one row a line and spectrum."""
    seed = int(os.environ.get("SPECSOLVE_TEST_SEED", "20261201"))
    rng = np.random.default_rng([seed, 15])
    n_stars = max(2, round(N_STARS * slow_fraction))
    rows = []
    for index in rng.choice(trials.possible_stars(), n_stars, replace=False):
        star = trials.make_star(int(index))
        for resolving_power in RESOLVING_POWERS:
            for signal in SIGNALS:
                spectrum = trials.observed(star, resolving_power, signal, rng)
                found = trials.trial(star, spectrum, rng)
                pixel = np.median(np.diff(np.log(spectrum.wavelength_air))) * 299792.458
                rows.append(
                    np.column_stack(
                        [
                            np.full(len(found), resolving_power),
                            np.full(len(found), signal),
                            star.widths,
                            found.equivalent_width,
                            found.equivalent_width_error,
                            found.noise_error,
                            found.continuum_error,
                            found.flags,
                            found.line_fwhm,
                            np.full(len(found), pixel),
                            found.wavelength_air,
                        ]
                    )
                )
    return np.concatenate(rows)


def names(draws) -> dict[str, np.ndarray]:
    first = ("resolving_power", "signal", "truth", "width", "error", "noise", "continuum")
    columns = (*first, "flags", "fwhm", "pixel", "wavelength")
    return dict(zip(columns, draws.T, strict=True))


def clean(d, *, significant: bool = True) -> np.ndarray:
    """Lines that count: covered, no spoiling flag but those that only say that a line is weak."""
    weak = t.FLAG_UPPER_LIMIT | t.FLAG_CONTINUUM
    good = np.isfinite(d["width"]) & ((d["flags"].astype(int) & SPOILING & ~weak) == 0)
    return good & (d["truth"] > 6.0 * d["noise"]) if significant else good


@pytest.mark.slow
def test_widths_are_unbiased(draws, figure, slow_fraction):
    """Median over the draws within 1 % of the width or 0.5 mA, whichever is larger, in every cell."""
    d = names(draws)
    failed = []
    for power in RESOLVING_POWERS:
        for signal in SIGNALS:
            at = clean(d) & (d["resolving_power"] == power) & (d["signal"] == signal)
            difference = (d["width"] - d["truth"])[at]
            bias, relative = float(np.median(difference)), float(np.median(difference / d["truth"][at]))
            met = abs(bias) <= 0.5 or abs(relative) <= 0.01
            words = "1 % or 0.5 mA" + ("" if met else "; NOT MET")
            where = f"R {power:.0f}, S/N {signal:.0f}, {at.sum()} draws"
            figure(f"{where}: median bias {100.0 * relative:.2f} %,", bias, "mA", limit=words)
            figure(f"{where}: mean bias", float(difference.mean()), "mA")
            sampling = 1.3 * np.std(difference) / np.sqrt(at.sum())  # of a median
            assert at.sum() >= LEAST_DRAWS * min(1.0, slow_fraction) * 0.5
            if abs(bias) > max(WORST_BIAS_MA, WORST_BIAS * np.median(d["truth"][at])) + 3.0 * sampling:
                failed.append(where)
    assert not failed


WORST_BIAS, WORST_BIAS_MA = 0.02, 1.0
"""Guard against getting worse where the bar of 1 % or 0.5 mA is not met."""


@pytest.mark.slow
def test_errors_hold(draws, figure):
    """Pulls of unit width: asked 0.9 to 1.1 over all draws and in every cell."""
    d = names(draws)
    at = clean(d)
    pulls = (d["width"] - d["truth"]) / d["error"]
    whole = robust_width(pulls[at])
    met = "" if 0.9 <= whole <= 1.1 else "; NOT MET"
    figure(f"pulls of {at.sum()} widths, robust width", whole, limit=f"0.9 to 1.1{met}")
    figure("the same, standard deviation", float(np.std(pulls[at])), limit="0.9 to 1.1")
    widths = []
    for power in RESOLVING_POWERS:
        for signal in SIGNALS:
            cell = at & (d["resolving_power"] == power) & (d["signal"] == signal)
            widths.append(robust_width(pulls[cell]))
            met = "" if 0.9 <= widths[-1] <= 1.1 else "; NOT MET"
            figure(f"R {power:.0f}, S/N {signal:.0f}: pulls", widths[-1], limit=f"0.9 to 1.1{met}")
    # The bar is not met: errors are too large at high S/N. Guards against worse; a cell of the quick run has 200 widths.
    assert 0.75 < whole < 1.25
    assert min(widths) > 0.45
    assert max(widths) < 1.5


@pytest.mark.slow
def test_noise_errors_are_those_of_cayrel(draws, figure):
    """Weak lines: reported noise over 1.5 sqrt(FWHM pixel) / (S/N), Cayrel 1988; 0.82 if the width were known.

    The common broadening is known better than a single line's width, so that the error may lie below Cayrel's.
    """
    d = names(draws)
    weak = clean(d, significant=False) & (d["truth"] > 2.0) & (d["truth"] < 30.0)
    to_ma = 1e3 * d["wavelength"] / 299792.458
    for signal in SIGNALS:
        at = weak & (d["signal"] == signal)
        cayrel = photon_error(d["fwhm"][at] * to_ma[at], d["pixel"][at] * to_ma[at], signal)
        ratio = float(np.median(d["noise"][at] / cayrel))
        figure(f"S/N {signal:.0f}: noise error over Cayrel's", ratio, limit="0.82 (width known) to 1 (free), +-10 %")
        assert 0.74 < ratio < 1.1


@pytest.mark.slow
def test_harmful_blends_are_told(draws, figure):
    """Of the widths at S/N >= 100 that are off by more than 10 % and 3 sigma of noise, 95 % carry a flag."""
    d = names(draws)
    off = np.abs(d["width"] - d["truth"])
    covered = np.isfinite(d["width"]) & (d["signal"] >= 100.0) & (d["truth"] > 6.0 * d["noise"])
    harmful = covered & (off > HARM_PART * d["truth"])
    harmful &= off > HARM_SIGMA * np.hypot(d["noise"], d["continuum"])
    told = float(((d["flags"][harmful].astype(int) & SPOILING) > 0).mean())
    lost = float(((d["flags"][covered & ~harmful].astype(int) & SPOILING) > 0).mean())
    met = "" if told >= 0.95 else "; NOT MET"
    figure(f"{harmful.sum()} harmful blends of {covered.sum()} lines, told", 100.0 * told, "%", limit=f"95 %{met}")
    figure("lines without harm that carry a flag", 100.0 * lost, "%")
    left = covered & ((d["flags"].astype(int) & SPOILING) == 0)
    figure("harmful ones among the lines that are used", 100.0 * float(harmful[left].mean()), "%")
    assert told > LEAST_TOLD
    assert lost < 0.5


LEAST_TOLD = 0.70
"""Guard against getting worse; a tenth of the stars has some 40 such cases, 6 % standard deviation."""
