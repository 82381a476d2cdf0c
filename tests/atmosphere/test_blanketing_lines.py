"""The packaged lines, and the sampling of their opacity."""

from __future__ import annotations

import os
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
from scipy.special import voigt_profile

from specsolve.atmosphere.blanketing_build import atomic_mass, gas_states
from specsolve.atmosphere.blanketing_lines import BlanketingLines, load_lines, save_lines
from specsolve.atmosphere.blanketing_sampling import (
    HJERTING_TABLE,
    hjerting,
    line_constants,
    order_statistics,
    sample,
    sample_reference,
)
from specsolve.matter.composition import composition_for
from specsolve.matter.equation_of_state import equilibrium


@pytest.fixture(scope="module")
def lines() -> BlanketingLines:
    return load_lines()


def rows(lines, ion, low_a, high_a):
    """Rows of an ion between two vacuum wavelengths [A]."""
    inside = (lines.wavelength_cm > low_a * 1e-8) & (lines.wavelength_cm < high_a * 1e-8)
    return np.flatnonzero(inside & (lines.ion_index == lines.ions.index(ion)))


def some_lines(lines, which):
    """A table of some rows only."""
    columns = {f.name: getattr(lines, f.name) for f in fields(lines)}
    return BlanketingLines(**{name: v if name == "ions" else v[which] for name, v in columns.items()})


def test_order_and_content(lines):
    assert len(lines) > 100_000
    assert np.all(np.diff(lines.wavelength_cm) >= 0.0)
    assert not any(ion.startswith("H ") for ion in lines.ions)
    assert {"Fe I", "Fe II", "Ca II", "Mg I", "Na I", "Ti II"} <= set(lines.ions)


@pytest.mark.parametrize(
    ("ion", "wavelength", "log_gf"),
    # NIST Atomic Spectra Database, vacuum wavelengths [A]; the Fe I value is of O'Brian et al. 1991.
    [
        ("Na I", 5891.583, 0.108),
        ("Ca II", 3934.777, 0.135),
        ("Mg I", 5185.048, -0.167),
        ("Ca I", 4227.918, 0.244),
        ("Fe I", 5271.004, -1.321),
    ],
)
def test_strong_lines_are_there_once_with_the_published_strength(lines, ion, wavelength, log_gf):
    near = rows(lines, ion, wavelength - 0.02, wavelength + 0.02)
    strong = near[lines.log_gf[near] > log_gf - 2.0]
    assert len(strong) == 1
    assert lines.log_gf[strong[0]] == pytest.approx(log_gf, abs=0.05)


def test_no_transition_is_counted_twice(lines):
    """Two rows of the same ion, lower level, wavelength and strength would be one transition from two lists."""
    key = np.stack(
        [lines.ion_index, np.rint(lines.excitation_potential * 500), np.rint(lines.wavelength_cm * 1e8 / 0.03)]
    )
    foreign = np.array([not ion.startswith("Fe ") for ion in lines.ions])[lines.ion_index]
    strong = foreign & (lines.log_gf - lines.excitation_potential > -3.0)
    unique = np.unique(key[:, strong], axis=1)
    assert strong.sum() - unique.shape[1] < 0.01 * strong.sum()  # unresolved pairs of NIST


def test_round_trip(lines, tmp_path):
    save_lines(lines, tmp_path / "lines.npz")
    again = load_lines(tmp_path / "lines.npz")
    assert again.ions == lines.ions
    for name in ("ion_index", "wavelength_cm", "excitation_potential", "log_gf", "log_gamma_rad"):
        np.testing.assert_array_equal(getattr(again, name), getattr(lines, name))


def test_hydrogen_broadening_against_published(lines):
    """log10 of the full width per perturber at 10 000 K: Barklem, Piskunov & O'Mara 2000, A&AS 142, 467."""
    constants = line_constants(lines, atomic_mass)
    published = [
        ("Mg II", 2796.352, -7.761),
        ("Ca II", 3934.777, -7.760),
        ("Na I", 5891.583, -7.526),
        ("Mg I", 5185.048, -7.267),
        ("Ca I", 4227.918, -7.562),
        ("Fe I", 4384.775, -7.668),
        ("Fe I", 5271.004, -7.760),
    ]
    for ion, wavelength, log_width in published:
        row = rows(lines, ion, wavelength - 0.02, wavelength + 0.02)[0]
        assert np.log10(constants.hydrogen[row] * 1e4**0.3) == pytest.approx(log_width, abs=0.12)


def test_voigt_function():
    for a in (1e-4, 1e-2, 0.09, 0.11, 0.5, 2.0, 20.0):
        v = np.concatenate([np.linspace(0, 6.5, 131), np.geomspace(6.5, 3000, 40)])
        exact = voigt_profile(v, np.sqrt(0.5), a) * np.sqrt(np.pi)
        values = np.array([hjerting(a, x, HJERTING_TABLE) for x in v])
        np.testing.assert_allclose(values, exact, rtol=4e-3)


def test_compiled_sampling_against_plain(lines):
    """All lines within 30 A of Ca II K, strong wings included, at a solar point."""
    inside = (lines.wavelength_cm > 3905e-8) & (lines.wavelength_cm < 3965e-8)
    table = some_lines(lines, inside)
    constants = line_constants(table, atomic_mass)
    gas = equilibrium(np.array([5200.0]), np.array([3e4]), composition_for(0.0))
    state = gas_states(table, gas, 0.0)[0]
    samples = np.linspace(3900e-8, 3970e-8, 700)
    nearest = np.minimum(np.searchsorted(samples, constants.wavelength_cm), len(samples) - 1)
    plain = sample_reference(constants, samples, state, 1.0)
    fast = sample(constants, samples, np.zeros(700, dtype=int), nearest, state, 1.0, np.array([1e-7]))
    np.testing.assert_allclose(fast, plain, rtol=5e-3, atol=1e-4)


def test_sampling_leaves_out_no_more_than_asked(lines):
    """With lines and wings dropped below 3e-4 of an opacity of 0.1, the loss stays below 1 % of that opacity."""
    inside = (lines.wavelength_cm > 4400e-8) & (lines.wavelength_cm < 4500e-8)
    table = some_lines(lines, inside)
    constants = line_constants(table, atomic_mass)
    gas = equilibrium(np.array([4800.0]), np.array([1e4]), composition_for(0.0))
    state = gas_states(table, gas, 0.0)[0]
    samples = np.linspace(4400e-8, 4500e-8, 500)
    nearest = np.minimum(np.searchsorted(samples, constants.wavelength_cm), len(samples) - 1)
    bands = np.zeros(500, dtype=int)
    full = sample(constants, samples, bands, nearest, state, 1.0, np.array([0.0]))
    cut = sample(constants, samples, bands, nearest, state, 1.0, np.array([3e-5]))
    assert np.all(cut <= full * (1 + 1e-12))
    assert np.max(full - cut) < 1e-3


def test_order_statistics_keep_the_mean():
    rng = np.random.default_rng(7)
    opacity = 10.0 ** rng.normal(0.0, 1.5, (5, 2000))
    edges = np.array([0.0, 0.2, 0.7, 0.99, 1.0])
    means = order_statistics(opacity, edges)
    np.testing.assert_allclose(means @ np.diff(edges), opacity.mean(axis=1), rtol=1e-12)
    assert np.all(np.diff(means, axis=1) > 0.0)
    with pytest.raises(ValueError, match="do not divide"):
        order_statistics(opacity[:, :130], edges)


@pytest.mark.slow
def test_packaged_lines_can_be_remade(lines):
    """From the published lists; needs the folder that SPECSOLVE_REFERENCE names."""
    from specsolve.atmosphere.blanketing_convert import convert

    folder = os.environ.get("SPECSOLVE_REFERENCE")
    if not folder:
        pytest.skip("SPECSOLVE_REFERENCE is not set")
    remade = convert(Path(folder))
    assert remade.ions == lines.ions
    np.testing.assert_array_equal(remade.ion_index, lines.ion_index)
    np.testing.assert_allclose(remade.wavelength_cm, lines.wavelength_cm, atol=0.51e-11)
    np.testing.assert_allclose(remade.log_gf, lines.log_gf, atol=1.01e-3)
