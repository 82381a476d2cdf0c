"""The packaged stores are what the program makes: nodes chosen by a hash, remade from nothing, from cold starts."""

from __future__ import annotations

import hashlib

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from specsolve.atmosphere.build import build_store
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.grid import ResponseGrid
from specsolve.grid.build import build_grid
from specsolve.grid.codes import decode

N_NODES, N_LINES = 3, 5
TEMPERATURE_K, WIDTH_DEX = 1.0, 1e-3
DEEPEST_LOG_TAU = 1.5  # below it no line and no continuum between 3500 and 10 000 Angstrom forms
WORDS = "honesty of stores"


def chosen(items: list, count: int) -> list:
    """Items with the smallest hashes of their names: nobody picked them."""
    return sorted(items, key=lambda item: hashlib.sha256(f"{WORDS} {item}".encode()).hexdigest())[:count]


@pytest.mark.slow
@pytest.mark.parametrize("which", range(N_NODES))
def test_a_node_remade_from_nothing_is_the_packaged_one(which, tmp_path, figure):
    atmospheres, grid = AtmosphereStore.packaged(), ResponseGrid.packaged()
    usable = [node for node in atmospheres.nodes() if atmospheres.has(*node)]
    teff, logg, mh = chosen(usable, N_NODES)[which]
    own = build_store(tmp_path / "atmospheres", teff=[teff], logg=[logg], mh=[mh])
    ours, theirs = own.get(teff, logg, mh), atmospheres.get(teff, logg, mh)
    upper = theirs.log_tau < DEEPEST_LOG_TAU
    temperature = CubicSpline(ours.log_tau, ours.temperature)(theirs.log_tau[upper])
    difference = float(np.max(np.abs(temperature - theirs.temperature[upper])))
    name = f"teff {teff:g} logg {logg:g} mh {mh:g}"
    figure(f"{name}: worst temperature", difference, "K", limit=f"<= {TEMPERATURE_K:g}")
    assert difference <= TEMPERATURE_K

    index = np.array(sorted(chosen(list(range(len(grid.lines))), N_LINES)))
    remade = build_grid(grid.lines.select(index), tmp_path / "grid", atmospheres=own)
    place = grid.lines.position_of(remade.lines.key)
    node = tuple(np.array([axis.index_of(v)]) for axis, v in zip(grid.node_axes, (teff, logg, mh), strict=True))
    packaged = decode(grid.gather("lte", node, place))[0]
    fresh = decode(remade.gather("lte", tuple(np.zeros(1, int) for _ in node), np.arange(N_LINES)))[0]
    assert packaged.shape == fresh.shape == (N_LINES, *(len(axis) for axis in grid.line_axes))
    assert np.array_equal(np.isnan(packaged), np.isnan(fresh))
    worst = float(np.nanmax(np.abs(packaged - fresh)))
    figure(f"{name}: worst of {packaged.size} widths", worst, "dex", limit=f"<= {WIDTH_DEX:g}")
    assert worst <= WIDTH_DEX


def test_grid_and_atmospheres_belong_together():
    assert ResponseGrid.packaged().atmospheres_identity == AtmosphereStore.packaged().identity
