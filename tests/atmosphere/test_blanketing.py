"""Reading and interpolation of the opacity distribution tables, and their agreement with the lines they come from."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from specsolve.atmosphere.blanketing import (
    LOG_OPACITY_STEP,
    PACKAGED_MH,
    SUB_EDGES,
    Blanketing,
    line_opacity,
    line_opacity_reference,
    load_blanketing,
    save_blanketing,
    spline_matrix,
    table_path,
)
from specsolve.atmosphere.blanketing_build import BAND_EDGES_NM, atomic_mass, build, distribution
from specsolve.atmosphere.blanketing_lines import DATA_FOLDER, load_lines
from specsolve.atmosphere.blanketing_sampling import line_constants
from specsolve.matter.composition import composition_for
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium

# Points between the nodes, roughly along the Sun [K], [dyn cm^-2].
TEMPERATURE = np.array([3340.0, 4150.0, 4660.0, 5170.0, 6180.0, 7500.0, 9620.0, 13170.0])
PRESSURE = 10.0 ** np.array([1.3, 2.7, 3.3, 4.2, 5.05, 5.2, 5.35, 5.6])


@pytest.fixture(scope="module")
def solar() -> Blanketing:
    return load_blanketing(0.0)


@pytest.fixture(scope="module")
def lines():
    table = load_lines()
    return table, line_constants(table, atomic_mass)


def direct(lines, mh, temperature, pressure, n_samples=3000, vmic=1.0):
    """Sub-bin opacities sampled afresh, and the continuum of each band."""
    gas = equilibrium(temperature, pressure, composition_for(mh))
    edges = BAND_EDGES_NM * 1e-7
    absorption, scattering = continuum_opacity(0.5 * (edges[1:] + edges[:-1]), gas)
    return distribution(*lines, gas, mh, vmic, edges, n_samples), absorption + scattering


def test_compiled_and_plain_evaluation_agree(solar):
    for vmic in (1.0, 1.3, 2.0):
        plain = line_opacity_reference(solar, TEMPERATURE, PRESSURE, vmic)
        np.testing.assert_allclose(line_opacity(solar, TEMPERATURE, PRESSURE, vmic), plain, rtol=1e-11)


def test_spline_goes_through_the_nodes(solar):
    values = solar.log_opacity[0, :, :, 11, 9]
    at_node = line_opacity(solar, 10.0 ** solar.log_temperature[[11]], 10.0 ** solar.log_pressure[[9]], 1.0)[:, :, 0]
    np.testing.assert_allclose(np.log10(at_node), values, atol=1e-5)  # tables are float32


def test_spline_is_exact_for_cubics():
    x = np.arange(9.0)
    coefficients = spline_matrix(9) @ (x**3 - 4 * x**2)
    middle = coefficients[:-3] + 23 * coefficients[1:-2] + 23 * coefficients[2:-1] + coefficients[3:]
    half = x[:-1] + 0.5
    np.testing.assert_allclose(middle / 48.0, half**3 - 4 * half**2, atol=1e-9)


@pytest.mark.parametrize("node", [8, 15, 24])
def test_slope_has_no_kink_at_a_node(solar, node):
    """Also at the last one, where the taper begins."""
    log_t, step, width = solar.log_temperature[node], 1e-5, solar.log_temperature[1] - solar.log_temperature[0]
    temperature = 10.0 ** (log_t + step * np.array([-1.0, 0.0, 1.0]))
    log_opacity = np.log10(line_opacity(solar, temperature, np.full(3, 10**4.3), 1.0))
    slopes = np.diff(log_opacity, axis=2) / step
    # Second derivatives of a few hundred (dex / dex^2) are ordinary; a kink would show as a jump of the slope itself.
    assert np.max(np.abs(np.diff(slopes, axis=2))) < 0.02 / width


def test_outside_the_table_raises(solar):
    with pytest.raises(ValueError, match="below the blanketing tables"):
        line_opacity(solar, np.array([2050.0]), np.array([1e3]), 1.0)
    for pressure in (1e-4, 1e8):
        with pytest.raises(ValueError, match="gas pressure"):
            line_opacity(solar, np.array([5000.0]), np.array([pressure]), 1.0)
    with pytest.raises(ValueError, match="microturbulence"):
        line_opacity(solar, np.array([5000.0]), np.array([1e4]), 2.5)
    with pytest.raises(FileNotFoundError, match="packaged are"):
        load_blanketing(-0.25)


def test_multiplier_enters_by_its_power(solar):
    doubled = replace(solar, multiplier=np.full(solar.n_bands, 2.0))
    raw = line_opacity(solar, TEMPERATURE, PRESSURE, 1.0, power=0.0)
    np.testing.assert_allclose(line_opacity(doubled, TEMPERATURE, PRESSURE, 1.0, power=2.0), 4.0 * raw, rtol=1e-12)
    np.testing.assert_allclose(line_opacity(doubled, TEMPERATURE, PRESSURE, 1.0, power=0.0), raw, rtol=1e-12)


def test_save_and_load_give_the_same_tables(solar, tmp_path):
    save_blanketing(solar, table_path(0.0, tmp_path))
    again = load_blanketing(0.0, tmp_path)
    np.testing.assert_array_equal(again.log_opacity, solar.log_opacity)
    assert again.mh == solar.mh


def test_storage_keeps_the_whole_range(solar, tmp_path):
    """From 1e-13 to 1e8 cm2/g, jumps of the whole range between neighbours included: stored differences wrap."""
    made_up = np.random.default_rng(3).uniform(-13.0, 8.0, solar.log_opacity.shape)
    save_blanketing(replace(solar, log_opacity=made_up), table_path(0.0, tmp_path))
    again = load_blanketing(0.0, tmp_path)
    assert np.abs(again.log_opacity - made_up).max() < 0.51 * LOG_OPACITY_STEP


def test_packaged_tables_are_complete():
    for mh in PACKAGED_MH:
        tables = load_blanketing(mh)
        assert tables.mh == mh
        assert np.all(np.isfinite(tables.log_opacity))
        assert tables.sub_weights.sum() == pytest.approx(1.0, abs=1e-12)
        np.testing.assert_allclose(tables.sub_weights, np.diff(SUB_EDGES))
    assert sum(path.stat().st_size for path in DATA_FOLDER.iterdir()) < 12e6


@pytest.mark.parametrize("mh", [0.0, -2.0])
def test_interpolation_against_direct_sampling(lines, mh, figure):
    """Error of the total opacity; 0.005 dex rms over channels moves no temperature by more than a few kelvin."""
    sampled, continuum = direct(lines, mh, TEMPERATURE, PRESSURE)
    read = line_opacity(load_blanketing(mh), TEMPERATURE, PRESSURE, 1.0)
    error = np.log10((read + continuum[:, None]) / (sampled + continuum[:, None]))
    figure("rms error of the interpolated opacity", np.sqrt(np.mean(error**2)), "dex", limit="0.003")
    assert np.sqrt(np.mean(error**2, axis=(0, 1))).max() < 0.005
    assert np.sqrt(np.mean(error**2)) < 0.003
    assert np.abs(error).max() < 0.06  # single narrow sub-bins at the coolest point


def test_microturbulence_between_the_nodes(lines, solar):
    sampled, continuum = direct(lines, 0.0, TEMPERATURE, PRESSURE, vmic=1.5)
    read = line_opacity(solar, TEMPERATURE, PRESSURE, 1.5)
    error = np.log10((read + continuum[:, None]) / (sampled + continuum[:, None]))
    assert np.sqrt(np.mean(error**2)) < 0.008  # a whole km/s changes the total by ten times as much


def test_means_converge_with_the_number_of_samples(lines, figure):
    """Planck and Rosseland type means over all bands at 5170 K; four times the samples as the truth."""
    point = slice(3, 4)
    edges = BAND_EDGES_NM * 1e-7
    centres, widths, weights = 0.5 * (edges[1:] + edges[:-1]), np.diff(edges), np.diff(SUB_EDGES)
    x = 1.438777 / (centres * TEMPERATURE[3])
    planck = centres**-5 / np.expm1(x) * widths
    rosseland = planck * x / -np.expm1(-x)
    means = {}
    for n_samples in (1000, 3000, 12000):
        sampled, continuum = direct(lines, 0.0, TEMPERATURE[point], PRESSURE[point], n_samples)
        total = sampled[:, :, 0] + continuum
        means[n_samples] = (
            np.sum(planck[:, None] * weights * total) / planck.sum(),
            rosseland.sum() / np.sum(rosseland[:, None] * weights / total),
        )
    errors = {n: np.abs(np.log(np.array(means[n]) / np.array(means[12000]))) for n in (1000, 3000)}
    figure("Rosseland mean, 3000 against 12000 samples", errors[3000][1], "relative", limit="0.003")
    figure("Planck mean, 3000 against 12000 samples", errors[3000][0], "relative", limit="0.1")
    assert errors[3000][1] < 0.003
    assert errors[3000][0] < 0.1  # carried by the cores of a few resonance lines, where nothing escapes


@pytest.mark.parametrize("mh", [0.0, -1.5])
def test_remade_column_equals_the_packaged_one(lines, mh):
    """Fifteen nodes of one pressure, sampled again from the packaged lines."""
    packaged = load_blanketing(mh)
    nodes = slice(4, 19)
    temperature = 10.0 ** packaged.log_temperature[nodes]
    remade, continuum = direct(lines, mh, temperature, np.full(len(temperature), 10.0 ** packaged.log_pressure[12]))
    stored = 10.0 ** packaged.log_opacity[0, :, :, nodes, 12].astype(float)
    difference = np.log10((remade + continuum[:, None]) / (stored + continuum[:, None]))
    assert np.abs(difference).max() < 0.51 * LOG_OPACITY_STEP + 1e-5


def test_a_table_of_any_metallicity_can_be_built():
    """Halfway between packaged ones the line opacity lies between theirs (mean logarithm: the mean is ruled by few samples)."""
    log_t, log_p = np.linspace(3.60, 3.78, 4), np.linspace(3.5, 5.0, 4)
    tables = build(-0.75, vmic=(1.0,), log_temperature=log_t, log_pressure=log_p, n_samples=1000)
    here = line_opacity(tables, np.array([5000.0]), np.array([3e4]), 1.0)
    low, high = (line_opacity(load_blanketing(mh), np.array([5000.0]), np.array([3e4]), 1.0) for mh in (-1.0, -0.5))
    blue = (BAND_EDGES_NM[:-1] >= 303.0) & (BAND_EDGES_NM[1:] <= 550.0)
    means = [np.einsum("bsn,s->b", np.log10(opacity), np.diff(SUB_EDGES))[blue] for opacity in (low, here, high)]
    assert np.all(means[0] < means[1])
    assert np.all(means[1] < means[2])
