"""First-order responses to [alpha/Fe] and the missing opacity against the full engine, between their nodes."""

from __future__ import annotations

import numpy as np
import pytest

import specsolve
from specsolve.grid import ResponseGrid
from specsolve.grid.engine import lte_widths
from specsolve.grid.perturbations import ALPHA, MISSING_OPACITY, Perturbations
from tests.integration.off_node import CENTRE, OffNode
from tests.integration.perturbed_atmospheres import load
from tests.integration.test_closure import star_at

STRENGTHS = (-6.3, -4.7)  # of the lines that are compared, a little beyond the default cut
AIM_RMS_DEX = 0.0015  # of log W for the step that the response was computed with; noise of 1 % is 0.004
AIM_LOGG = 0.01  # a tenth of what 0.2 dex of alpha does to the gravity of giants


def pairs(name: str, fraction: float) -> list:
    """The pairs of one perturbation, or a sample of them."""
    found = [pair for pair in load() if pair.name == name]
    return found if fraction >= 1.0 else found[1::5]


def compared(name: str, fraction: float) -> tuple[np.ndarray, np.ndarray]:
    """True and predicted changes of log W of all pairs and usable lines."""
    grid, stored = ResponseGrid.packaged(), Perturbations.packaged()
    places = stored.line_places(grid.lines.key)
    true, predicted = [], []
    for pair in pairs(name, fraction):
        zero = np.zeros(1)
        before = lte_widths(pair.original, grid.lines, np.array([pair.vmic]), zero)[:, 0, 0]
        after = lte_widths(pair.changed, grid.lines, np.array([pair.vmic]), zero)[:, 0, 0]
        theta = np.array([pair.original.teff, pair.original.logg, pair.original.mh, pair.vmic])
        usable = (before > STRENGTHS[0]) & (before < STRENGTHS[1])
        true.append((after - before)[usable])
        predicted.append((pair.step * stored.response(name, theta, np.zeros(len(places)), places))[usable])
    return np.concatenate(true), np.concatenate(predicted)


@pytest.mark.slow
@pytest.mark.parametrize("name", [ALPHA, MISSING_OPACITY])
def test_responses_hold_between_their_nodes(name, slow_fraction, figure):
    true, predicted = compared(name, slow_fraction)
    error = predicted - true
    rms, worst = float(np.sqrt(np.mean(error**2))), float(np.abs(error).max())
    figure(f"{name}: rms of the change itself", float(np.sqrt(np.mean(true**2))), "dex", source="full engine")
    figure(
        f"{name}: rms error of the change of log W",
        rms,
        "dex",
        limit=f"aim {AIM_RMS_DEX:g}",
        source=f"{true.size} widths",
    )
    figure(f"{name}: worst error", worst, "dex")
    assert np.sqrt(np.mean(true**2)) > 0.004  # there is something to predict
    assert rms < AIM_RMS_DEX
    assert worst < 6.0 * AIM_RMS_DEX
    assert rms < 0.25 * np.sqrt(np.mean(true**2))


@pytest.mark.slow
def test_a_star_of_other_alpha_is_solved_with_it(slow_fraction, figure):
    """Widths of the full engine 0.2 dex above the law: solved with the law, and with the star's own [alpha/Fe]."""
    grid = ResponseGrid.packaged()
    stars, truth, known = [], [], {}
    for number, pair in enumerate(pairs(ALPHA, slow_fraction)):
        star, _ = star_at(OffNode(CENTRE, pair.vmic, pair.changed), grid.lines, f"s{number}")
        stars.append(star)
        truth.append([pair.original.teff, pair.original.logg, pair.original.mh, pair.vmic])
        known[star.name] = pair.changed.alpha
    truth = np.array(truth)
    with_law = specsolve.solve(stars, grid, treatment="lte")
    with_own = [specsolve.solve(star, grid, treatment="lte", known={"alpha": known[star.name]}) for star in stars]
    solved = np.array([a.status == b.status == "solved" for a, b in zip(with_law, with_own, strict=True)])
    assert solved.mean() > 0.8
    wrong = np.array([one.parameters for one in with_law])[solved] - truth[solved]
    right = np.array([one.parameters for one in with_own])[solved] - truth[solved]
    for place, (parameter, unit) in enumerate((("teff", "K"), ("logg", "dex"), ("feh", "dex"), ("vmic", "km/s"))):
        figure(f"rms {parameter} with the law", float(np.sqrt(np.mean(wrong[:, place] ** 2))), unit)
        figure(f"rms {parameter} with alpha given", float(np.sqrt(np.mean(right[:, place] ** 2))), unit)
    rms = np.sqrt(np.mean(right**2, axis=0))
    figure("rms logg with alpha given", float(rms[1]), "dex", limit=f"aim {AIM_LOGG:g}", source=f"{solved.sum()} stars")
    assert rms[1] < AIM_LOGG
    assert rms[1] < 0.5 * np.sqrt(np.mean(wrong[:, 1] ** 2))
    assert all(one.alpha_given and one.alpha == known[one.star] for one in with_own)
    assert [one.alpha_given for one in with_law] == [False] * len(stars)
    assert {one.grid_identity for one in with_own} == {grid.identity}
