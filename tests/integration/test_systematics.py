"""The missing-opacity multiplier as a systematic error: stars whose atmospheres have it not, or twice its logarithm.

The multiplier stands for lines that the lists lack; it is fixed on the Sun and the same everywhere, which is wrong in
principle. What the parameters of a star would change without it, or with twice of it, is its error term.
"""

from __future__ import annotations

import numpy as np
import pytest

import specsolve
from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.atmosphere.structure import solve_structure
from specsolve.grid import ResponseGrid
from specsolve.matter.composition import composition_for
from tests.integration.off_node import CENTRE, OffNode
from tests.integration.test_closure import star_at

MH = 0.0
STARS = (  # on nodes, where the grid itself has no error: teff, logg, vmic
    (4750.0, 2.5, 1.5),
    (4750.0, 4.5, 0.9),
    (5000.0, 3.0, 1.4),
    (5250.0, 4.5, 0.9),
    (5500.0, 4.5, 1.0),
    (5750.0, 4.5, 1.0),
    (6000.0, 4.5, 1.2),
    (6250.0, 4.0, 1.5),
)
AIM_TEFF_K, AIM_LOGG = 25.0, 0.04


def solved(power: float, chosen) -> np.ndarray:
    """Solved minus true parameters on the packaged grid, shape (n_stars, 4)."""
    grid, store = ResponseGrid.packaged(), AtmosphereStore.packaged()
    blanketing, composition = load_blanketing(MH), composition_for(MH)
    stars, truth = [], []
    for teff, logg, vmic in chosen:
        start = store.get(teff, logg, MH)
        model = start
        if power != 1.0:
            model = solve_structure(teff, logg, composition, blanketing, start=start, power=power)
        assert model.status in ("converged", "imported"), model.reason
        stars.append(star_at(OffNode(CENTRE, vmic, model), grid.lines, f"{teff:g}/{logg:g}")[0])
        truth.append([teff, logg, MH, vmic])
    solutions = specsolve.solve(stars, grid, treatment="lte")
    assert all(one.status == "solved" for one in solutions), [one.reason for one in solutions]
    return np.array([one.parameters for one in solutions]) - np.array(truth)


@pytest.mark.slow
@pytest.mark.parametrize("power", [0.0, 2.0])
def test_change_by_the_multiplier(power, slow_fraction, figure):
    chosen = STARS if slow_fraction >= 1.0 else STARS[1::4]
    difference = solved(power, chosen)
    for (teff, logg, _), (d_teff, d_logg, d_feh, d_vmic) in zip(chosen, difference, strict=True):
        name = f"multiplier power {power:g}, {teff:g}/{logg:g}"
        figure(f"{name}: teff", d_teff, "K", limit=f"aim {AIM_TEFF_K:g}")
        figure(f"{name}: logg", d_logg, "dex", limit=f"aim {AIM_LOGG:g}")
        figure(f"{name}: [Fe/H]", d_feh, "dex")
        figure(f"{name}: vmic", d_vmic, "km/s")
    worst = np.max(np.abs(difference), axis=0)
    figure(f"multiplier power {power:g}: worst teff", worst[0], "K", limit=f"aim {AIM_TEFF_K:g}")
    figure(f"multiplier power {power:g}: worst logg", worst[1], "dex", limit=f"aim {AIM_LOGG:g}")
    assert worst[0] <= AIM_TEFF_K
    assert worst[1] <= AIM_LOGG
    assert worst[0] > 0.5  # a multiplier without effect would be a mistake of this test


@pytest.mark.slow
def test_no_change_without_a_change():
    """At nodes with the packaged atmospheres themselves: the code step of 1e-4 dex is all that is left."""
    difference = np.abs(solved(1.0, STARS[1::4]))
    assert np.all(difference <= np.array([1.0, 0.004, 0.002, 0.008]))
