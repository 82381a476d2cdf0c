"""Equivalent widths: limits known on paper, the compiled version against NumPy, both against a dense calculation."""

from __future__ import annotations

import time
from types import SimpleNamespace

import numpy as np
import pytest

from specsolve.formation import reduced_widths, reduced_widths_reference
from specsolve.formation.equivalent_width import optical_steps
from specsolve.formation.exponential_integral import N_PIECES, OFFSET, SHIFT, table
from specsolve.formation.layers import make_layers
from specsolve.lines import LineList, default_line_list
from specsolve.matter.composition import composition_for
from tests.formation.dense import reduced_width
from tests.formation.structures import scaled_solar

VMIC = np.arange(8) * 0.5
SUN = (5777.0, 4.44, 0.0)
METAL_POOR_GIANT = (4500.0, 1.0, -2.5)


@pytest.fixture(scope="module", params=[SUN, METAL_POOR_GIANT], ids=["sun", "metal_poor_giant"])
def star(request):
    teff, logg, mh = request.param
    composition = composition_for(mh)
    return SimpleNamespace(mh=mh, composition=composition, structure=scaled_solar(teff, logg, composition))


@pytest.fixture(scope="module")
def lines():
    return default_line_list().select(slice(0, 210, 30))


def abundances(mh):
    return 7.46 + mh + np.linspace(-1.4, 1.4, 8)


def test_compiled_equals_numpy(star, lines):
    """5e-4 dex: the Voigt approximation is good to 1e-4 of the opacity, the E2 table to 1e-6."""
    fast = reduced_widths(star.structure, star.composition, lines, VMIC, abundances(star.mh))
    plain = reduced_widths_reference(star.structure, star.composition, lines, VMIC, abundances(star.mh))
    assert fast.shape == (len(lines), 8, 8)
    np.testing.assert_allclose(fast, plain, atol=2e-4)


def test_blue_line_of_metal_poor_giant_against_dense():
    """Scattering dominates here (albedo 0.8 at tau = 0.3): 0.3 % of W, of which 0.15 % is the dense grid's own."""
    teff, logg, mh = METAL_POOR_GIANT
    composition = composition_for(mh)
    structure = scaled_solar(teff, logg, composition)
    blue = LineList.from_arrays([3950.0], ["Fe I"], [2.2], [-1.66], broadening_sigma=400.0, broadening_alpha=0.25)
    for abundance in (4.36, 5.56):
        fast = reduced_widths(structure, composition, blue, [2.0], [abundance])[0, 0, 0]
        dense = reduced_width(structure, composition, blue, 0, 2.0, abundance)
        assert fast == pytest.approx(dense, abs=0.003 * np.log10(np.e))


@pytest.mark.slow
def test_accuracy_against_dense(star, lines):
    """Below log(W/l) = -4.9 0.3 %, to -4.5 1 %; the dense grid's own error is about 0.1 %."""
    chosen = lines.select([1, 4, 6])
    for vmic, abundance in zip((0.5, 2.0, 1.0), abundances(star.mh)[[7, 4, 2]], strict=True):
        fast = reduced_widths(star.structure, star.composition, chosen, [vmic], [abundance])[:, 0, 0]
        for i, value in enumerate(fast):
            dense = reduced_width(star.structure, star.composition, chosen, i, vmic, abundance)
            bar = 0.003 if dense < -4.9 else 0.01
            assert abs(10.0 ** (value - dense) - 1.0) < bar, (chosen.key[i], vmic, abundance, dense)


def test_finer_layers_and_profile_change_little(star, lines):
    usual = reduced_widths(star.structure, star.composition, lines, VMIC[::2], abundances(star.mh))
    fine = reduced_widths(
        star.structure, star.composition, lines, VMIC[::2], abundances(star.mh), n_layers=200, n_profile=60
    )
    error = np.abs(10.0 ** (usual - fine) - 1.0)
    assert error[fine < -4.9].max() < 0.002
    assert error[fine < -4.5].max() < 0.004
    assert error.max() < 0.006


def test_weak_line_is_proportional_to_abundance(star, lines):
    """The limit of small optical depth: d log W / dA = 1, microturbulence without effect."""
    faint = lines.with_columns(log_gf=lines.log_gf - 6.0)
    result = reduced_widths(star.structure, star.composition, faint, [0.0, 3.0], [7.0 + star.mh, 8.0 + star.mh])
    np.testing.assert_allclose(result[:, :, 1] - result[:, :, 0], 1.0, atol=0.02)
    np.testing.assert_allclose(result[:, 1], result[:, 0], atol=0.02)


def test_damping_part_goes_as_square_root(star):
    """Curve of growth: W rises with the square root of the abundance when wings dominate."""
    strong = LineList.from_arrays(
        [5000.0], ["Fe I"], [1.0], [1.5], broadening_sigma=400.0, broadening_alpha=0.25, log_gamma_rad=8.5
    )
    low, high = reduced_widths(star.structure, star.composition, strong, [1.0], 8.0 + star.mh + np.array([0.0, 1.0]))[
        0, 0
    ]
    assert high - low == pytest.approx(0.5, abs=0.06)


def test_strong_lines_stay_monotone(star):
    """log(W/l) up to -3.5 and beyond: finite, increasing with abundance and with microturbulence."""
    strong = LineList.from_arrays(
        [4100.0, 5300.0, 6700.0],
        "Fe I",
        [0.1, 0.9, 2.5],
        [0.5, 0.0, 0.5],
        broadening_sigma=300.0,
        broadening_alpha=0.25,
    )
    result = reduced_widths(star.structure, star.composition, strong, VMIC, abundances(star.mh))
    assert result.max() > -3.7
    assert np.all(np.isfinite(result))
    assert np.all(np.diff(result, axis=2) > 0.0)
    assert np.all(np.diff(result, axis=1) > -1e-4)


def test_lines_do_not_know_each_other(star, lines):
    """The same alone, in reverse order, and one microturbulence at a time; matrix products round by their shape."""
    together = reduced_widths(star.structure, star.composition, lines, VMIC[:3], abundances(star.mh))
    reverse = reduced_widths(
        star.structure, star.composition, lines.select(slice(None, None, -1)), VMIC[:3], abundances(star.mh)
    )
    np.testing.assert_allclose(reverse[::-1], together, atol=1e-12)
    alone = reduced_widths(star.structure, star.composition, lines.select([2]), VMIC[1:2], abundances(star.mh))
    np.testing.assert_allclose(alone[0, 0], together[2, 1], atol=1e-12)


def test_log_gf_acts_as_abundance(star, lines):
    shifted = lines.with_columns(log_gf=lines.log_gf + 0.3)
    a = abundances(star.mh)
    one = reduced_widths(star.structure, star.composition, shifted, [1.0], a)
    other = reduced_widths(star.structure, star.composition, lines, [1.0], a + 0.3)
    np.testing.assert_allclose(one, other, atol=1e-12)


def test_departures_of_one_change_nothing_and_scale_opacity(star, lines):
    n_layers = 64
    one = np.ones((len(lines), n_layers))
    a = abundances(star.mh)
    usual = reduced_widths(star.structure, star.composition, lines, [1.0], a)
    same = reduced_widths(star.structure, star.composition, lines, [1.0], a, departures=lambda _: (one, one))
    np.testing.assert_allclose(same, usual, atol=1e-10)
    less = reduced_widths(
        star.structure, star.composition, lines, [1.0], a, departures=lambda _: (0.5 * one, 0.5 * one)
    )
    shifted = reduced_widths(star.structure, star.composition, lines, [1.0], a - np.log10(2.0))
    np.testing.assert_allclose(less, shifted, atol=1e-6)


def test_given_electrons_are_used(star, lines):
    """Twice the electrons: more H- opacity, weaker Fe II lines."""
    s = star.structure
    more = SimpleNamespace(
        column_mass=s.column_mass,
        temperature=s.temperature,
        gas_pressure=s.gas_pressure,
        electron_density=2.0 * s.electron_density,
    )
    ionized = LineList.from_arrays([6432.68], ["Fe II"], [2.891], [-3.57])
    usual = reduced_widths(s, star.composition, ionized, [1.0], [7.0 + star.mh])[0, 0, 0]
    changed = reduced_widths(more, star.composition, ionized, [1.0], [7.0 + star.mh])[0, 0, 0]
    assert changed < usual - 0.05


def test_shallow_structure_is_refused(star):
    s = star.structure
    cut = SimpleNamespace(**{name: getattr(s, name)[:50] for name in s.__dataclass_fields__})
    with pytest.raises(ValueError, match="log tau_5000"):
        make_layers(cut, star.composition)


def test_e2_table():
    from scipy.special import expn

    t = np.logspace(-11, 1.75, 20001)
    piece = (t.view(np.int64) >> SHIFT) - OFFSET
    assert piece.min() > 0
    assert piece.max() < N_PIECES
    c = table()[piece]
    np.testing.assert_allclose(c[:, 0] + t * (c[:, 1] + t * c[:, 2]), expn(2, t), atol=3e-7)


def test_optical_steps_are_exact_for_cubics():
    x = np.arange(9.0)
    exact = np.diff(x**4 / 4.0 - x**3 + 2.0 * x)
    np.testing.assert_allclose(optical_steps(x**3 - 3.0 * x**2 + 2.0), exact, atol=1e-12)


@pytest.mark.slow
def test_speed_against_numpy(star):
    """One width takes at most 60 us of processor time on one core; the NumPy version is timed in the same run."""
    every = default_line_list()
    a = abundances(star.mh)
    reduced_widths(star.structure, star.composition, every.select([0]), [1.0], a)
    start = time.process_time()
    n_fast = reduced_widths(star.structure, star.composition, every, VMIC, a).size
    fast = (time.process_time() - start) / n_fast
    start = time.process_time()
    n_plain = reduced_widths_reference(star.structure, star.composition, every.select(slice(0, 210, 42)), VMIC, a).size
    plain = (time.process_time() - start) / n_plain
    print(f"one width: compiled {fast * 1e6:.1f} us, NumPy {plain * 1e6:.0f} us")
    assert fast < 60e-6
    assert plain > 5.0 * fast
