"""A converged atmosphere: at most two seconds of one core, warm; the plain counterpart of its kernels beside it."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.atmosphere.blanketing import line_opacity, line_opacity_reference, load_blanketing
from specsolve.atmosphere.channels import channels
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.atmosphere.structure import opacity_vmic, solve_structure
from specsolve.matter.composition import composition_for
from specsolve.radiation.transfer import solve_reference
from specsolve.radiation.transfer_kernels import solve_channels
from tests.benchmarks.timing import best

pytestmark = pytest.mark.slow

WARM_LIMIT_S = 2.0
CASES = (  # wanted teff, logg; neighbour teff, logg; mh
    ((5750.0, 4.5), (5500.0, 4.5), 0.0),
    ((4750.0, 2.5), (4750.0, 3.0), 0.0),
    ((6250.0, 4.0), (6000.0, 4.0), 0.0),
    ((5000.0, 2.0), (5250.0, 2.5), -2.0),
)
LEAST_SPEEDUP = 5.0


@pytest.mark.parametrize(("node", "neighbour", "mh"), CASES)
def test_warm_atmosphere(node, neighbour, mh, figure):
    """From the nearest node of the store, as in a build."""
    store, blanketing, composition = AtmosphereStore.packaged(), load_blanketing(mh), composition_for(mh)
    start = store.get(*neighbour, mh)
    solve_structure(*node, composition, blanketing, start=start, max_iterations=1)  # compiles
    models = []
    took = best(lambda: models.append(solve_structure(*node, composition, blanketing, start=start)))
    assert models[-1].status == "converged"
    assert models[-1].flux_error <= 1e-5
    name = f"atmosphere {node[0]:g}/{node[1]:g}/{mh:+g}"
    figure(f"{name}, warm", took, "s", limit=f"<= {WARM_LIMIT_S:g}")
    cold = best(lambda: solve_structure(*node, composition, blanketing), 1)
    figure(f"{name}, cold", cold, "s")
    assert took <= WARM_LIMIT_S


def test_kernels_against_plain(figure):
    """Opacity and transfer of all channels for one trial structure, compiled and in NumPy."""
    model, blanketing = AtmosphereStore.packaged().get(5750.0, 4.5, 0.0), load_blanketing(0.0)
    layers = channels(model.temperature, model.gas_pressure, composition_for(0.0), blanketing, opacity_vmic(4.5))
    state = (layers.opacity, layers.destruction, layers.thermal)
    field = solve_channels(*state, model.column_mass)
    some = np.arange(0, len(layers.opacity), 20)

    def plain_transfer() -> None:
        for k in some:
            top = 0.5 * layers.opacity[k, 0] * model.column_mass[0]
            mean, _, _ = solve_reference(field["steps"][k], top, layers.destruction[k], layers.thermal[k])
            np.testing.assert_allclose(mean, field["mean"][k], rtol=1e-5)

    fast = best(lambda: solve_channels(*state, model.column_mass), 5)
    plain = best(plain_transfer, 2) * len(layers.opacity) / len(some)
    figure("transfer of all channels, compiled", 1e3 * fast, "ms")
    figure("transfer of all channels, dense NumPy over compiled", plain / fast, "times")
    opacity = (blanketing, model.temperature, model.gas_pressure, 1.0)
    line_opacity(*opacity)
    quick = best(lambda: line_opacity(*opacity), 5)
    slow = best(lambda: line_opacity_reference(*opacity), 3)
    figure("line opacity of all channels, compiled", 1e3 * quick, "ms")
    figure("line opacity of all channels, NumPy over compiled", slow / quick, "times")
    assert plain > LEAST_SPEEDUP * fast
    assert slow > quick
