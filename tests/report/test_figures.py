"""The page of a star: what it computes, and that it can be drawn in every state of a solution."""

from __future__ import annotations

import sys
from dataclasses import replace

import numpy as np
import pytest

from specsolve.errors import OutputError, UsageError
from specsolve.report.figures import file_stem, numbered, page, save_pages
from specsolve.report.panels import band_sigma, counterfactual_slope, fe1_used, leverage
from tests.report.made_up import made_up_solution


@pytest.fixture
def one(rng):
    return made_up_solution(rng, "star / one")


def texts(figure):
    found = [text.get_text() for text in figure.texts]
    for axes in figure.axes:
        found += [axes.get_title(loc="left"), *(text.get_text() for text in axes.texts)]
    return "\n".join(found)


def test_leverage_is_the_diagonal_of_the_hat_matrix(one):
    mask = fe1_used(one)
    design = np.column_stack([np.ones(mask.sum()), one.lines.excitation_potential[mask], one.lines.strength[mask]])
    weighted = design * np.sqrt(one.lines.weight[mask])[:, None]
    hat = np.diag(weighted @ np.linalg.inv(weighted.T @ weighted) @ weighted.T)
    share = leverage(one)
    np.testing.assert_allclose(share[mask], hat / 3, atol=1e-12)
    assert share[~mask].sum() == 0


def test_a_hotter_star_tilts_the_excitation_trend_as_its_lines_say(one):
    # d_abundance falls by 8e-5 dex/K per eV in the made-up star: 100 K give -0.008 dex/eV
    change = counterfactual_slope(one, "excitation_potential", 0, 100.0) - counterfactual_slope(
        one, "excitation_potential", 0, 0.0
    )
    assert change == pytest.approx(-0.008, abs=1e-12)


def test_the_band_is_narrowest_where_intercept_and_slope_say(one):
    trend = one.trends[0]
    assert band_sigma(trend, np.array([trend.pivot]))[0] == pytest.approx(0.012)
    assert band_sigma(trend, np.array([trend.pivot + 2.0]))[0] == pytest.approx(np.hypot(0.012, 2 * 0.006))


def test_dropped_lines_stand_on_the_page_with_number_and_reason(one):
    words = texts(page(one))
    words = words.replace("\u00a0", " ")
    assert "dropped: not in grid" in words
    assert "left out by the cuts: 3 predicted strength cut" in words
    assert "weight 0.40" in words
    assert "45 used" in words
    assert "treatment lte | solar iron 7.46" in words
    assert numbered(one) == {30: 1, 7: 2}


def test_a_star_without_fe2_without_parameters_or_without_lines_still_gets_its_page(one, tmp_path):
    lines = one.lines
    only_fe1 = {name: values[lines.ion == "Fe I"] for name, values in vars(lines).items()}
    nan2 = replace(one.fe2, abundance=np.nan, feh=np.nan, n_lines=0)
    residuals = one.residuals.copy()
    residuals[1] = np.nan
    no_fe2 = replace(one, lines=type(lines)(**only_fe1), fe2=nan2, residuals=residuals, fixed=("logg",))
    unsolved = replace(
        one, parameters=np.full(4, np.nan), status="unsolved", reason="3 usable lines", trends=(), candidates=()
    )
    nothing = replace(unsolved, lines=type(lines)(**{name: values[:0] for name, values in vars(lines).items()}))
    paths = save_pages([no_fe2, unsolved, nothing], tmp_path, "png")
    assert len({path.name for path in paths}) == 3
    assert all(path.stat().st_size > 5000 for path in paths)
    assert "no Fe II" in texts(page(no_fe2))
    assert "3 usable lines" in texts(page(unsolved))


def test_star_names_make_safe_file_names(one):
    assert file_stem(one) == "star_one_lte"
    assert file_stem(replace(one, star="../..")) == "lte"


def test_pages_need_matplotlib_and_say_so(one, monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    with pytest.raises(UsageError, match=r"specsolve\[plots\]"):
        page(one)


def test_a_folder_that_cannot_be_made_is_one_clear_error(one, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot write figures into"):
        save_pages([one], tmp_path / "file" / "inside")
