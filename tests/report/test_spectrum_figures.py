"""Figures of spectra: what is drawn, in which order, into which files."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.errors import OutputError
from specsolve.measuring import Measured
from specsolve.report.measured import summary, tables_of
from specsolve.report.spectrum_figures import COLUMNS, ROWS, badness, envelope, line_pages, overview, save_pages
from specsolve.spectrum.types import FLAG_BLEND, FLAG_NOT_COVERED, FLAG_UPPER_LIMIT, Measurements, Spectrum, Window
from specsolve.spectrum.velocity import Velocity

N_LINES = 30
WORST, ABSENT = 17, 4


@pytest.fixture
def measured(rng):
    """Thirty made-up lines: one is bad, one is not covered."""
    centre = 5100.0 + 40.0 * np.arange(N_LINES)
    wave = np.arange(5000.0, 6400.0, 0.03)
    flux = 1.0 + rng.normal(0.0, 0.01, wave.size)
    windows = []
    for c in centre:
        near = np.abs(wave - c) < 0.8
        line = 1.0 - 0.4 * np.exp(-0.5 * ((wave[near] - c) / 0.07) ** 2)
        others = 1.0 - 0.2 * np.exp(-0.5 * ((wave[near] - c - 0.4) / 0.07) ** 2)
        windows.append(
            Window(
                wavelength_air=wave[near],
                flux=line * others + rng.normal(0.0, 0.01, near.sum()),
                sigma=np.full(near.sum(), 0.01),
                model=line * others,
                line=line,
                neighbours=others,
                used=rng.random(near.sum()) > 0.05,
                continuum_error=0.003,
            )
        )
    windows[ABSENT] = None
    flags = np.zeros(N_LINES, int)
    flags[WORST], flags[ABSENT] = FLAG_BLEND | FLAG_UPPER_LIMIT, FLAG_NOT_COVERED
    width = np.full(N_LINES, 70.0)
    width[ABSENT] = np.nan
    chi2 = np.ones(N_LINES)
    chi2[WORST] = 9.0
    ones = np.ones(N_LINES)
    found = Measurements(
        star="made up",
        wavelength_air=centre,
        ion=np.where(np.arange(N_LINES) % 5 == 0, "Fe II", "Fe I"),
        excitation_potential=3.0 * ones,
        log_gf=-2.0 * ones,
        equivalent_width=width,
        equivalent_width_error=2.0 * ones,
        noise_error=1.5 * ones,
        continuum_error=1.0 * ones,
        blend_error=0.8 * ones,
        continuum_group=np.arange(N_LINES) // 3,
        upper_limit=6.0 * ones,
        integrated_width=width + 1.0,
        predicted_width=75.0 * ones,
        depth=0.4 * ones,
        line_fwhm=9.0 * ones,
        line_shift=0.1 * ones,
        chi2=chi2,
        order=np.zeros(N_LINES, int),
        flags=flags,
        use=flags == 0,
        windows=tuple(windows),
        broadening=8.5,
        broadening_error=0.1,
    )
    grid = np.arange(-50.0, 50.0)
    velocity = Velocity(
        value=12.3,
        error=0.04,
        significance=35.0,
        fwhm=9.0,
        depth=0.4,
        n_lines=29,
        vacuum_share=0.1,
        vacuum_share_error=0.2,
        group_wavelength=np.array([5200.0, 5700.0, 6200.0]),
        group_value=np.array([12.2, 12.3, 12.4]),
        group_error=np.full(3, 0.1),
        search_velocity=grid,
        search_profile=0.3 * np.exp(-0.5 * ((grid - 12.3) / 4.0) ** 2),
    )
    spectrum = Spectrum.from_arrays("made up", wave, flux, sigma=0.01, resolving_power=50000.0)
    return Measured(
        path="made up.fits",
        star="made up",
        spectrum=spectrum,
        velocity=velocity,
        measurements=found,
        guess_source="said",
    )


def test_the_worst_line_comes_first_and_uncovered_ones_not_at_all(measured):
    score = badness(measured.measurements)
    assert int(np.nanargmax(score)) == WORST
    assert np.isnan(score[ABSENT])
    pages = list(line_pages(measured))
    assert len(pages) == -(-(N_LINES - 1) // (ROWS * COLUMNS))
    assert len(pages[0].axes) == ROWS * COLUMNS
    first = pages[0].axes[0]
    assert first.get_title(loc="left").startswith(f"Fe I {5100.0 + 40.0 * WORST:.2f}")
    assert any("blend" in text.get_text() for text in first.texts)
    assert sum(len(page.axes) for page in pages) == N_LINES - 1


def test_the_overview_has_the_spectrum_the_velocity_and_the_lines(measured):
    figure = overview(measured)
    titles = [axes.get_title(loc="left") for axes in figure.axes]
    assert sum(bool(title) for title in titles) == 4
    assert any("12.30" in text.get_text() for text in figure.texts)


def test_files(measured, tmp_path):
    names = [path.name for path in save_pages([measured], tmp_path / "figures", "png")]
    assert names == ["made_up_spectrum.png", "made_up_lines_01.png", "made_up_lines_02.png"]
    assert all((tmp_path / "figures" / name).stat().st_size > 10000 for name in names)
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot write figures"):
        save_pages([measured], tmp_path / "file")


def test_envelope_keeps_extremes():
    x, low, high = envelope(np.arange(100.0), np.r_[np.zeros(50), 5.0, np.zeros(48), -3.0], 10)
    assert (high.max(), low.min(), x.size) == (5.0, -3.0, 10)


def test_tables_and_words_of_the_same_spectrum(measured):
    tables = tables_of([measured], {"made_by": "a test"})
    assert len(tables["measurements"]) == N_LINES - 1
    assert tables["measurements"]["flags"][WORST - 1] == "blend,upper_limit"
    (row,) = tables["spectra"]
    assert (row["n_lines"], row["n_measured"], row["n_use"]) == (N_LINES, N_LINES - 1, N_LINES - 2)
    text = " ".join(summary(measured))
    for words in ("velocity +12.30 +- 0.04 km/s (35 sigma)", "30 lines: 28 to use, 1 upper limits", "1 blend"):
        assert words in text
