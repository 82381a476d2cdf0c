"""The demo's spectra: marked invented, readable, and their invented truths come back."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from specsolve.balance.batch import Setting, solve_star
from specsolve.balance.solve import open_grid
from specsolve.demo import CLUSTER_FEH, INVENTED, MEMBERS, TARN
from specsolve.demo_spectra import VISITS
from specsolve.lines.reading import default_line_list
from specsolve.measuring import Task, measure_spectrum, star_of_widths
from specsolve.spectrum.read import read_spectrum
from specsolve.spectrum.types import Spectrum

FOLDER = Path(__file__).resolve().parents[2] / "demo_data" / "spectra"
PATHS = {visit.member: FOLDER / f"{visit.member.replace(' ', '_')}.fits" for visit in VISITS}
LARGEST_FILE = 400_000  # bytes


def test_files_are_small_and_say_that_they_are_invented():
    assert sorted(FOLDER.iterdir()) == sorted(PATHS.values())
    for path in PATHS.values():
        assert path.stat().st_size < LARGEST_FILE
        header = fits.getheader(path)
        assert INVENTED in " ".join(str(header["COMMENT"]).split("\n")) or "Invented" in str(header["COMMENT"])
        assert "invented" in header["INSTRUME"]


def test_they_are_read_with_their_gap_errors_and_resolving_power():
    spectrum = read_spectrum(PATHS[VISITS[0].member])
    gap = (spectrum.wavelength_air > TARN.gap[0]) & (spectrum.wavelength_air < TARN.gap[1])
    assert spectrum.mask[gap].all()
    assert spectrum.mask.sum() == gap.sum()
    assert spectrum.resolving_power == TARN.resolving_power
    assert (spectrum.air_source, spectrum.sigma_source, spectrum.normalised) == ("header", "file", False)
    assert spectrum.correlation == 1.0


@pytest.fixture(scope="module")
def measured():
    return {
        name: measure_spectrum(Task(path=str(path), lines=default_line_list(), barycentric=True))
        for name, path in PATHS.items()
    }


@pytest.mark.slow
def test_velocities_come_back(measured, figure):
    for visit in VISITS:
        found = measured[visit.member].velocity
        figure(f"{visit.member}: velocity minus truth", found.value - visit.velocity, "km/s", limit="0.1")
        assert abs(found.value - visit.velocity) < 0.1
        assert np.isfinite(found.barycentric)


@pytest.mark.slow
def test_parameters_come_back(measured, figure):
    """From pixels to parameters, on the packaged grid; log gf of the truth are off as the list says, others by 0.15 dex."""
    grid = open_grid(None)
    members = {member.name: member for member in MEMBERS}
    pulls = []
    for name, one in measured.items():
        solution = solve_star(star_of_widths(one.measurements), grid, Setting(treatment="lte"))
        assert solution.status == "solved"
        truth = members[name]
        difference = solution.parameters - np.array([truth.teff, truth.logg, CLUSTER_FEH, truth.vmic])
        for i, (parameter, unit) in enumerate((("teff", "K"), ("logg", "dex"), ("feh", "dex"), ("vmic", "km/s"))):
            figure(f"{name}: {parameter} minus truth", difference[i], unit)
        pulls.append(difference / solution.errors)
    figure("demo spectra, rms of difference over error", np.sqrt(np.mean(np.square(pulls))), limit="about 1")
    # twelve pulls that share the errors of one line list
    assert np.abs(pulls).max() < 4.0


def in_orders(one: Spectrum) -> Spectrum:
    """The same pixels as orders of 300 Angstrom that overlap by 40 and fade towards their ends."""
    pieces = []
    for number, start in enumerate(np.arange(one.wavelength_air[0], one.wavelength_air[-1] - 60.0, 260.0)):
        piece = one.select((one.wavelength_air >= start) & (one.wavelength_air < start + 300.0))
        blaze = np.clip(1.0 - ((piece.wavelength_air - start - 150.0) / 190.0) ** 2, 0.1, None)
        pieces.append(
            piece.replace(flux=piece.flux * blaze, sigma=piece.sigma * blaze, order=np.full(piece.n_pixels, number))
        )
    names = ("wavelength_air", "flux", "sigma", "mask", "order")
    return one.replace(**{name: np.concatenate([getattr(piece, name) for piece in pieces]) for name in names})


@pytest.mark.slow
def test_orders_give_the_widths_of_the_whole(measured, figure):
    from specsolve.spectrum.measure import measure_lines
    from specsolve.spectrum.options import MeasureOptions
    from specsolve.spectrum.orders import merged, overlap_notes

    whole = measured[VISITS[1].member]
    orders = in_orders(whole.spectrum)
    assert overlap_notes(orders) == ()
    options = MeasureOptions(guess=whole.guess)
    for what, spectrum in (("separate", orders), ("merged", merged(orders))):
        found = measure_lines(spectrum, default_line_list(), options=options, windows=False)
        both = found.use & whole.measurements.use
        change = (found.equivalent_width - whole.measurements.equivalent_width)[both]
        pull = change / whole.measurements.equivalent_width_error[both]
        figure(f"widths from {what} orders against the whole, median", np.median(change), "mA")
        figure(f"widths from {what} orders against the whole, rms over error", np.sqrt(np.mean(pull**2)))
        assert both.sum() > 0.85 * whole.measurements.use.sum()
        assert abs(np.median(change)) < 0.5
        assert np.sqrt(np.mean(pull**2)) < 1.0  # the same photons
