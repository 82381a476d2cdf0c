"""One equivalent width: at most 60 us (aim 40) of one core, and how a node's cost grows with lines and widths."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import SOLAR_IRON
from specsolve.formation.equivalent_width import reduced_widths, reduced_widths_reference
from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC
from specsolve.lines import default_line_list
from specsolve.matter.composition import composition_for
from tests.benchmarks.timing import best

pytestmark = pytest.mark.slow

LIMIT_S, AIM_S = 60e-6, 40e-6
LEAST_SPEEDUP = 5.0
NODES = ((5750.0, 4.5, 0.0), (4500.0, 1.5, -1.0), (6250.0, 4.0, -2.0))


def arguments(node):
    model = AtmosphereStore.packaged().get(*node)
    return model, composition_for(model.mh, model.alpha), SOLAR_IRON + model.mh + np.array(DEFAULT_DA)


@pytest.mark.parametrize("node", NODES)
def test_one_width(node, figure):
    """All lines, microturbulences and abundances of a node; NumPy, with exact functions, on some of the lines."""
    model, composition, abundances = arguments(node)
    lines, vmic = default_line_list(), np.array(DEFAULT_VMIC)
    reduced_widths(model, composition, lines.select([0]), vmic[:1], abundances)
    n_fast = len(lines) * vmic.size * abundances.size
    fast = best(lambda: reduced_widths(model, composition, lines, vmic, abundances)) / n_fast
    some = lines.select(np.arange(0, len(lines), 42))
    n_plain = len(some) * 2 * abundances.size
    plain = best(lambda: reduced_widths_reference(model, composition, some, vmic[2:4], abundances), 1) / n_plain
    name = "width at {:g}/{:g}/{:+g}".format(*node)
    figure(f"{name}", 1e6 * fast, "us", limit="<= 60, aim 40")
    figure(f"{name}, NumPy over compiled", plain / fast, "times")
    assert fast <= LIMIT_S
    assert plain > LEAST_SPEEDUP * fast


def test_growth_with_lines_and_widths(figure):
    """The cost of a node is nearly proportional to its lines; what a line costs once, whatever its widths, is small."""
    model, composition, abundances = arguments(NODES[0])
    lines, vmic = default_line_list(), np.array(DEFAULT_VMIC)
    reduced_widths(model, composition, lines.select([0]), vmic[:1], abundances)
    took = {}
    for n_lines in (10, 50, 200):
        chosen = lines.select(np.linspace(0, len(lines) - 1, n_lines).astype(int))
        took[n_lines] = best(lambda chosen=chosen: reduced_widths(model, composition, chosen, vmic, abundances))
        figure(f"a node of {n_lines} lines, 64 widths a line", 1e3 * took[n_lines], "ms")
    one = best(lambda: reduced_widths(model, composition, lines, vmic[2:3], abundances[3:4]))
    figure(f"a star of {len(lines)} lines, 1 width a line", 1e3 * one, "ms")
    assert took[200] <= 6.0 * took[50] + 0.02
    assert one < took[200] / 4.0
