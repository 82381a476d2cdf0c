"""Spectra of three giants of a co-moving group, whose widths and parameters are published.

Spectra, widths and parameters: Casey et al. 2014, MNRAS 443, 828 (R 28 000 blue, 22 000 red, S/N 100-135). Read from the
reference folder; nothing of them is kept here. The published widths have no errors and were measured on the same
spectra, so that the comparison is about continuum, blends and profiles.
"""

from __future__ import annotations

import numpy as np
import pytest
from astropy.table import Table

from specsolve.balance.batch import Setting, solve_star
from specsolve.balance.solve import open_grid
from specsolve.balance.star import Star, nearest_lines
from specsolve.lines.reading import default_line_list, read_line_list
from specsolve.measuring import Task, measure_spectrum, star_of_widths

SOURCE = "Casey et al. 2014, MNRAS 443, 828"
FILES = {
    "J221821-183424": "j221821-183424.fits.gz",
    "C2306265-085103": "c2306265-085103.fits.gz",
    "J223811-104126": "j22381-104126.fits.gz",
}
STRONGEST_MA = 120.0
NAMES = ("teff", "logg", "feh", "vmic")
COLUMNS = ("teff_K", "logg", "feh", "vmic_kms")

pytestmark = [pytest.mark.slow, pytest.mark.reference, pytest.mark.timeout(3000)]


@pytest.fixture(scope="module")
def published(reference):
    return Table.read(reference / "stars" / "group_giants_lines.ecsv", format="ascii.ecsv")


@pytest.fixture(scope="module")
def parameters(reference):
    table = Table.read(reference / "stars" / "group_giants_parameters.ecsv", format="ascii.ecsv")
    return {str(row["star"]): np.array([float(row[name]) for name in COLUMNS]) for row in table}


@pytest.fixture(scope="module")
def line_lists(reference):
    return {
        "default": default_line_list(),
        "published": read_line_list(reference / "stars" / "group_giants_lines.ecsv"),
    }


@pytest.fixture(scope="module")
def measured(reference, line_lists):
    """Every star with both lists; no guess of the star is given."""
    return {
        (star, name): measure_spectrum(Task(path=str(reference / "spectra" / file), lines=lines))
        for star, file in FILES.items()
        for name, lines in line_lists.items()
    }


def differences(one, rows):
    """Own minus published widths [mA] of the lines that are good enough for a solve, and the published ones."""
    found = one.measurements
    index = nearest_lines(
        found.wavelength_air, found.ion, found.excitation_potential, np.array(rows["wavelength_air"], float),
        np.array(rows["ion"]).astype(str), np.array(rows["excitation_potential"], float),
    )  # fmt: skip
    keep = (index >= 0) & found.use & np.isfinite(found.equivalent_width)
    theirs = np.array(rows["equivalent_width"], float)[index[keep]]
    weak = theirs < STRONGEST_MA
    return (found.equivalent_width[keep] - theirs)[weak], theirs[weak], found.equivalent_width_error[keep][weak]


def scatter(values):
    return float(1.4826 * np.median(np.abs(values - np.median(values))))


@pytest.mark.parametrize("name", ["default", "published"])
def test_widths_agree_with_the_published_ones(measured, published, figure, name):
    every, errors = [], []
    for star in FILES:
        difference, _, error = differences(measured[star, name], published[published["star"] == star])
        figure(f"{star}, {name} list, {difference.size} lines below 120 mA: median", np.median(difference), "mA",
               limit="|median| <= 2", source=SOURCE)  # fmt: skip
        figure(f"{star}, {name} list: robust scatter", scatter(difference), "mA", limit="<= 5", source=SOURCE)
        assert difference.size >= 20
        assert abs(np.median(difference)) <= 2.0
        assert scatter(difference) <= 5.0
        every.append(difference)
        errors.append(error)
    together = np.concatenate(every)
    figure(f"{name} list, all: median", np.median(together), "mA", limit="|median| <= 2", source=SOURCE)
    figure(f"{name} list, all: robust scatter", scatter(together), "mA", limit="<= 5", source=SOURCE)
    figure(f"{name} list, all: scatter over own error", scatter(together / np.concatenate(errors)), source=SOURCE)


def test_velocities_are_those_of_spectra_brought_to_rest(measured, figure):
    for star in FILES:
        velocity = measured[star, "default"].velocity
        figure(f"{star}: velocity left in the rest-frame spectrum", velocity.value, "km/s", source=SOURCE)
        assert abs(velocity.value) < 3.0
        assert velocity.error < 0.3
        assert not any("look like" in note for note in velocity.notes)


def test_parameters_from_own_widths_and_from_the_published_ones(measured, published, parameters, figure):
    """The same solver on three sets of widths: only the widths differ between the first two."""
    grid = open_grid(None)
    for star in FILES:
        rows = published[published["star"] == star]
        theirs = Star.from_arrays(
            star,
            np.array(rows["wavelength_air"], float),
            np.array(rows["ion"]).astype(str),
            np.array(rows["equivalent_width"], float),
            excitation_potential=np.array(rows["excitation_potential"], float),
        )
        solved = {
            "published widths": solve_star(theirs, grid, Setting()),
            "own widths, published list": solve_star(
                star_of_widths(measured[star, "published"].measurements), grid, Setting()
            ),
            "own widths, default list": solve_star(
                star_of_widths(measured[star, "default"].measurements), grid, Setting()
            ),
        }
        print(f"\n{star}: published {parameters[star]}")
        for what, one in solved.items():
            print(f"  {what}: {one.status} {np.round(one.parameters, 3)} +- {np.round(one.errors, 3)}")
            for i, (name, unit) in enumerate(zip(NAMES, ("K", "dex", "dex", "km/s"), strict=True)):
                if np.isfinite(one.parameters[i]):
                    figure(
                        f"{star}, {what}: {name} minus published",
                        one.parameters[i] - parameters[star][i],
                        unit,
                        source=SOURCE,
                    )
        own, other = solved["own widths, published list"], solved["published widths"]
        assert np.all(np.isfinite(own.parameters))
        if np.all(np.isfinite(other.parameters)):
            pulls = (own.parameters - other.parameters) / np.hypot(own.errors, other.errors)
            figure(
                f"{star}: largest difference of own from published widths over error",
                np.abs(pulls).max(),
                source=SOURCE,
            )
            assert np.abs(pulls).max() < 3.0


def test_a_guess_that_is_far_off_ends_at_the_same_widths(reference, line_lists, measured, figure):
    """The first prediction is for a dwarf whatever the star; a guess of another star changes the widths little."""
    from specsolve.spectrum.predict import Guess

    star = "J221821-183424"
    path = str(reference / "spectra" / FILES[star])
    once = measure_spectrum(Task(path=path, lines=line_lists["default"], guess=Guess()))
    twice = measured[star, "default"]
    both = once.measurements.use & twice.measurements.use
    change = (twice.measurements.equivalent_width - once.measurements.equivalent_width)[both]
    figure("widths predicted for the star against for a dwarf: median", np.median(change), "mA")
    figure("widths predicted for the star against for a dwarf: robust scatter", scatter(change), "mA")
    assert abs(np.median(change)) < 1.0
