"""What departures from LTE do to parameters, against published behaviour. Asked figures stand beside the measured ones.

Simulated stars are LTE widths of the packaged grid, solved in NLTE: the step is what a change of treatment does to one set
of widths. Figures that are not met say so, and the assertion then only guards against getting worse.
"""

from __future__ import annotations

import numpy as np
import pytest
from astropy.table import Table

from specsolve.balance.solve import solve
from specsolve.grid.store import ResponseGrid
from specsolve.star_table import read_stars
from tests.integration.nlte_steps import nlte_solution, nlte_step

pytestmark = pytest.mark.slow

SITNOVA = "Sitnova et al. 2015, abstract"
SAKARI = "Sakari et al. 2018, ApJ 868, 110"
#: Turn-off, subgiant branch and giant branch of an old metal-poor population: Teff, log g (from memory).
SEQUENCE = ((6450, 4.2), (6300, 4.0), (6000, 3.75), (5700, 3.6), (5400, 3.4), (5200, 3.0), (5000, 2.4), (4800, 1.8))


@pytest.fixture(scope="module")
def grid():
    return ResponseGrid.packaged()


def test_hd_122563_at_its_fundamental_temperature(grid, reference, figure):
    """4642 K and log g 1.32 from the angular diameter (Soubiran et al. 2024, table 6)."""
    stars = read_stars(reference / "stars" / "giants_lines.ecsv")
    star = next(s for s in stars if s.name == "HD122563")
    found = {name: solve(star, grid, treatment=name, fix={"teff": 4642.0}) for name in ("lte", "nlte")}
    for name, one in found.items():
        figure(f"HD 122563, {name}: log g at 4642 K", one.logg, "dex", limit="1.32 +- 0.25 in nlte")
        for term, shift in one.systematics.items():
            if term == "hydrogen_collisions":
                figure("HD 122563: shift of log g with S_H x 3, / 3 the opposite", shift[1], "dex")
    held = {name: solve(star, grid, treatment=name, fix={"teff": 4642.0, "logg": 1.32}).residuals[1] for name in found}
    figure("HD 122563, lte: ionization offset at 4642 K, 1.32", held["lte"], "dex")
    figure("HD 122563, nlte: the same", held["nlte"], "dex", limit="0.06")
    figure("its change", held["nlte"] - held["lte"], "dex", limit=">= 0.08")
    assert found["nlte"].logg == pytest.approx(1.32, abs=0.25)
    assert held["nlte"] - held["lte"] >= 0.08
    assert abs(held["nlte"]) <= 0.06
    assert "wants_outside_teff" in solve(star, grid, treatment="nlte").flags


def published_steps(reference, grid):
    table = Table.read(reference / "stars" / "lte_to_nlte_shifts.ecsv")
    names = ("teff_K", "logg", "feh", "vmic_kms")
    for row in table:
        lte = np.array([float(row[f"lte_{name}"]) for name in names])
        step = np.array([float(row[f"nlte_1d_{name}"]) for name in names]) - lte
        inside = lte[2] >= grid.axes["mh"][0] and lte[1] >= 0.5 and lte[0] >= grid.axes["teff"][0]
        if inside:
            yield str(row["star"]), lte, step


def test_steps_of_metal_poor_standards(grid, reference, figure):
    """LTE widths at the published LTE parameters, solved in NLTE, against the published step in 1D NLTE.

    NOT MET: giants of log g about 1 and [Fe/H] about -2.9 move by 0.3 to 0.5 dex more than published, of which S_H x 3 takes
    away 0.15 to 0.2, the published Teff as much. The turn-off star and giants above log g 1.4 agree.
    """
    theirs, ours, with_teff = [], [], []
    for star, lte, step in published_steps(reference, grid):
        found = nlte_solution(grid, lte)
        free = found.parameters - lte
        held = nlte_step(grid, lte, fix={"teff": lte[0] + step[0]})
        collisions = found.systematics.get("hydrogen_collisions", np.full(4, np.nan))
        figure(f"{star} ({lte[0]:.0f}/{lte[1]}/{lte[2]}): step of log g {free[1]:+.2f}, S_H x 3 {collisions[1]:+.2f}, "
               f"with the published Teff {held[1]:+.2f}, published {step[1]:+.2f}; of Teff {free[0]:+.0f}, published",
               step[0], "K", source=SAKARI)  # fmt: skip
        theirs.append(step)
        ours.append(free)
        with_teff.append(held)
    theirs, ours, with_teff = map(np.array, (theirs, ours, with_teff))
    higher = np.array([lte[1] >= 1.4 for _, lte, _ in published_steps(reference, grid)])
    assert np.isfinite(ours[:, 1]).all()
    difference = (ours - theirs)[:, 1]
    rms = float(np.sqrt(np.mean(difference**2)))
    slope = np.polyfit(theirs[:, 1], ours[:, 1], 1)[0]
    figure("slope of our step in log g against the published", slope, limit="1 +- 0.3: not met", source=SAKARI)
    figure("rms of the difference in log g", rms, "dex", limit="0.12: not met", source=SAKARI)
    above = float(np.sqrt(np.mean(difference[higher] ** 2)))
    figure("rms of the difference in log g, stars above log g 1.4", above, "dex", limit="0.12", source=SAKARI)
    worst_teff = float(np.abs((ours - theirs)[:, 0]).max())
    figure("largest difference in Teff", worst_teff, "K", limit="40: not met", source=SAKARI)
    rms_held = float(np.sqrt(np.nanmean((with_teff - theirs)[:, 1] ** 2)))
    figure("rms in log g with the published Teff", rms_held, "dex", source=SAKARI)
    hot = theirs[:, 1] >= 0.39
    figure("turn-off stars, our step in log g", float(ours[hot, 1].mean()), "dex", limit="+0.25 to +0.55")
    assert ((ours[hot, 1] >= 0.25) & (ours[hot, 1] <= 0.55)).all()
    # Asked 0.12 of all; these guard against worse.
    assert above <= 0.15
    assert rms <= 0.30


def test_steps_stay_small_where_published_ones_do(grid, figure):
    """Below 0.1 dex in log g where [Fe/H] > -0.75 or Teff < 5750 K or log g > 4.2; up to 0.5 dex in very metal-poor turn-off
    stars and subgiants. NOT MET near those borders below [Fe/H] = -2: up to 0.2 dex at log g 4.3 and 6300 K."""
    small, large = [], []
    for feh in (-0.5, -1.0, -1.5, -2.0, -2.5):
        for teff, logg in ((5500, 4.4), (5700, 4.4), (6000, 4.3), (6000, 4.0), (6300, 4.3), (6300, 3.9), (6200, 3.7)):
            step = nlte_step(grid, (teff, logg, feh, 1.2))[1]
            quiet = feh > -0.75 or teff < 5750 or logg > 4.2
            (small if quiet else large).append((step, teff, logg, feh))
            figure(
                f"step of log g at {teff}/{logg}/{feh}",
                step,
                "dex",
                limit="0.1" if quiet else "up to 0.5",
                source=SITNOVA,
            )
    small_steps = np.array([abs(row[0]) for row in small])
    large_steps = np.array([row[0] for row in large])
    figure(
        "share of the quiet region below 0.1 dex",
        float(np.mean(small_steps <= 0.1)),
        limit="1: not met",
        source=SITNOVA,
    )
    figure("largest step in the quiet region", float(small_steps.max()), "dex", limit="0.1: not met", source=SITNOVA)
    figure("largest step outside it", float(large_steps.max()), "dex", limit="0.5", source=SITNOVA)
    assert np.mean(small_steps <= 0.1) >= 0.85
    assert small_steps.max() <= 0.25
    assert 0.2 <= large_steps.max() <= 0.6


def test_steps_along_a_sequence_of_equal_age(grid, figure):
    """Near 5700/3.6/-2.4 about +150 K, +0.2, +0.1 dex, 0.2 km/s; growing towards low gravity (common practice, no source)."""
    steps = []
    for teff, logg in SEQUENCE:
        vmic = 1.5 if logg > 2.5 else 1.8
        free = nlte_step(grid, (teff, logg, -2.4, vmic))
        held = nlte_step(grid, (teff, logg, -2.4, vmic), fix={"teff": float(teff)})
        steps.append(free)
        words = f"{teff}/{logg}/-2.4: Teff {free[0]:+.0f} K, [Fe/H] {free[2]:+.3f}, vmic {free[3]:+.2f}, log g with Teff held "
        figure(f"{words}{held[1]:+.3f}; log g", free[1], "dex", source="common practice, no source")
    steps = np.array(steps)
    assert np.isfinite(steps[:, 1]).all()
    assert (steps[:5, 1] > 0.0).all()  # turn-off and subgiants


def test_near_solar_dwarfs_differentially(grid, reference, figure):
    """Departures cancel line by line between near-solar dwarfs: asked 5 K and 0.01 dex."""
    table = Table.read(reference / "stars" / "dwarfs_differential_parameters.ecsv")
    sun = next(row for row in table if row["star"] == "Sun")
    at = {"teff": float(sun["teff_K"]), "logg": float(sun["logg"]), "feh": 0.0, "vmic": float(sun["vmic_kms"])}
    stars = read_stars(reference / "stars" / "dwarfs_differential_lines.ecsv")
    found = {
        name: solve(stars, grid, treatment=name, reference="Sun", reference_parameters=at) for name in ("lte", "nlte")
    }
    steps = np.array([b.parameters - a.parameters for a, b in zip(found["lte"], found["nlte"], strict=True)])
    for k, (name, unit, limit) in enumerate(
        (("teff", "K", "5"), ("logg", "dex", "0.01"), ("feh", "dex", "0.01"), ("vmic", "km/s", ""))
    ):
        figure(f"dwarfs, NLTE minus LTE, mean of {name}", steps[:, k].mean(), unit, limit=limit)
        figure(f"dwarfs, NLTE minus LTE, worst of {name}", np.abs(steps[:, k]).max(), unit, limit=limit)
    assert np.abs(steps[:, 0].mean()) <= 5.0
    assert np.abs(steps[:, 2].mean()) <= 0.01
