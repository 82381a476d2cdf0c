"""The same windows with `specutils` line fitting and with `scipy` least squares: accuracy and time.

Both get a Gaussian on a straight continuum within 0.45 Angstrom of each line, as general libraries are used for the
purpose; they know nothing of neighbours. Ours knows 85 % of them, off by 0.2 dex, and a guess of the star that is off.
"""

import time
import warnings

import numpy as np
import pytest
from scipy.optimize import curve_fit

from specsolve.spectrum import types as t
from tests.spectrum import trials

HALF_WINDOW = 0.45  # Angstrom
AREA = np.sqrt(np.pi / (4.0 * np.log(2.0)))


def gaussian_on_line(wave, depth, centre, fwhm, level, slope):
    return level + slope * (wave - centre) - depth * np.exp(-4.0 * np.log(2.0) * ((wave - centre) / fwhm) ** 2)


def with_scipy(wave, flux, sigma, centre):
    start = (0.3, centre, 0.15, 1.0, 0.0)
    found, _ = curve_fit(gaussian_on_line, wave, flux, p0=start, sigma=sigma, maxfev=2000)
    return 1e3 * found[0] * abs(found[2]) * AREA / found[3]


def with_specutils(wave, flux, sigma, centre):
    from astropy import units
    from astropy.modeling import models
    from astropy.nddata import StdDevUncertainty
    from specutils import Spectrum
    from specutils.fitting import fit_lines

    spectrum = Spectrum(
        spectral_axis=wave * units.Angstrom,
        flux=flux * units.dimensionless_unscaled,
        uncertainty=StdDevUncertainty(sigma),
    )
    start = models.Const1D(1.0) + models.Gaussian1D(-0.3, centre * units.Angstrom, 0.06 * units.Angstrom)
    line = fit_lines(spectrum, start)
    sigma_line = abs(getattr(line.stddev_1, "value", line.stddev_1))
    return (
        -1e3 * float(line.amplitude_1.value) * float(sigma_line) * np.sqrt(2.0 * np.pi) / float(line.amplitude_0.value)
    )


@pytest.mark.slow
def test_against_specutils_and_scipy(rng, figure):
    index = next(
        i
        for i in trials.possible_stars()
        if trials.off_node.load()[i].model.mh > -0.6 and 5000.0 < trials.off_node.load()[i].model.teff < 5800.0
    )
    star = trials.make_star(index)
    spectrum = trials.observed(star, 50000.0, 150.0, rng)
    trials.trial(star, spectrum, rng)  # compiles
    start = time.process_time()
    ours = trials.trial(star, spectrum, rng)
    seconds = {"specsolve": time.process_time() - start}
    lines = trials.lines()
    chosen = np.flatnonzero((star.widths > 10.0) & (star.widths < 120.0) & ((ours.flags & t.FLAG_NOT_COVERED) == 0))
    from scipy.ndimage import percentile_filter

    level = percentile_filter(spectrum.flux, 90.0, 801)  # a usual first normalisation; ours gets the raw flux
    found = {"specsolve": ours.equivalent_width[chosen]}
    for name, function in (("scipy", with_scipy), ("specutils", with_specutils)):
        start = time.process_time()
        widths = []
        for i in chosen:
            centre = lines.wavelength_air[i]
            at = np.abs(spectrum.wavelength_air - centre) < HALF_WINDOW
            arguments = (spectrum.wavelength_air[at], (spectrum.flux / level)[at], (spectrum.sigma / level)[at], centre)
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                try:
                    widths.append(function(*arguments))
                except RuntimeError:  # no convergence
                    widths.append(np.nan)
        seconds[name] = time.process_time() - start
        found[name] = np.array(widths)
    scatter = {}
    for name, widths in found.items():
        difference = (widths - star.widths[chosen])[np.isfinite(widths)]
        scatter[name] = float(np.median(np.abs(difference)))
        figure(f"{name}: median |error| of {difference.size} of {chosen.size} lines", scatter[name], "mA")
        figure(f"{name}: median error", float(np.median(difference)), "mA")
        figure(f"{name}: time a line", 1e3 * seconds[name] / chosen.size, "ms")
    assert scatter["specsolve"] < 0.8 * scatter["scipy"]
    assert scatter["specsolve"] < 0.8 * scatter["specutils"]
    assert seconds["specsolve"] < seconds["specutils"] * 2.0
