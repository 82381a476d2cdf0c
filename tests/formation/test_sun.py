"""Abundances of iron from published solar widths on our own model of the Sun."""

from __future__ import annotations

from importlib import resources

import numpy as np
import pytest

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.structure import solve_structure
from specsolve.constants import SOLAR_LOGG, SOLAR_TEFF
from specsolve.formation import reduced_widths
from specsolve.lines import LineList, default_line_list, identify
from specsolve.matter.composition import composition_for

VMIC = 1.0  # km/s, the middle of the published range 0.8-1.2 for the Sun


@pytest.fixture(scope="module")
def solar():
    """Line abundances at the solar parameters; widths of Bedell et al. 2017, ApJ 839, 94, log(W/l) < -4.8."""
    path = resources.files("specsolve") / "data" / "sun" / "solar_widths.csv"
    rows = np.genfromtxt(str(path), delimiter=",", names=True, skip_header=3, dtype=None, encoding="utf-8")
    named = identify(
        LineList.from_arrays(rows["wavelength_air"], rows["ion"], rows["excitation_potential"], np.zeros(len(rows)))
    )
    every = default_line_list()
    where = every.position_of(named.key)
    lines = every.select(where[where >= 0])
    log_width = np.log10(rows["equivalent_width"] * 1e-3 / rows["wavelength_air"])[where >= 0]
    composition = composition_for(0.0)
    model = solve_structure(SOLAR_TEFF, SOLAR_LOGG, composition, load_blanketing(0.0))
    axis = np.linspace(6.4, 8.6, 23)
    curves = reduced_widths(model, composition, lines, [VMIC], axis)[:, 0]
    abundance = np.array([np.interp(w, c, axis) for w, c in zip(log_width, curves, strict=True)])
    unsaturated = log_width < -4.8
    return lines.select(unsaturated), abundance[unsaturated]


def test_best_neutral_lines(solar):
    """A(Fe) = 7.46 of Asplund, Amarsi & Grevesse 2021 within 0.07, scatter below 0.06, grade 1 laboratory values."""
    lines, abundance = solar
    best = abundance[(lines.ion == "Fe I") & (lines.grade == 1)]
    assert best.size > 20
    assert best.mean() == pytest.approx(7.46, abs=0.07)
    assert best.std(ddof=1) < 0.06


def test_ionized_lines_and_their_two_scales(solar):
    """The default scale scatters less than that of NIST, by which it was chosen; both are within 0.07 of 7.46."""
    lines, abundance = solar
    ionized = (lines.ion == "Fe II") & np.isfinite(lines.log_gf_alternative) & (lines.grade == 1)
    other = abundance + lines.log_gf - lines.log_gf_alternative
    assert abundance[ionized].mean() == pytest.approx(7.46, abs=0.07)
    assert other[ionized].mean() == pytest.approx(7.46, abs=0.07)
    assert abundance[ionized].std(ddof=1) < 0.08 < other[ionized].std(ddof=1)


def test_ionization_balance(solar):
    lines, abundance = solar
    neutral = abundance[(lines.ion == "Fe I") & (lines.grade == 1)].mean()
    ionized = abundance[(lines.ion == "Fe II") & (lines.grade == 1)].mean()
    assert abs(neutral - ionized) < 0.04
