"""Where the time of the statistical equilibrium goes: seconds a model against levels and lines, and memory."""

import subprocess
import sys
import time

import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.matter.composition import composition_for
from specsolve.nlte.equilibrium import iterate, medium
from specsolve.nlte.packaged import SIZES, packaged_atom
from specsolve.nlte.recipe import Recipe

NODES = ((5750.0, 4.5, 0.0), (5750.0, 3.5, -2.5), (4500.0, 1.5, -2.5))
MEMORY = """
import resource
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.matter.composition import composition_for
from specsolve.nlte.equilibrium import solve_equilibrium
from specsolve.nlte.packaged import packaged_atom
result = solve_equilibrium(AtmosphereStore.packaged().get(5750.0, 4.5, 0.0), composition_for(0.0), packaged_atom())
assert result.converged
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0**2)
"""


@pytest.mark.slow
@pytest.mark.parametrize("size", SIZES)
def test_seconds_a_model(size, figure):
    """Processor time of one core, from LTE; the kernels are compiled before."""
    atom, store = packaged_atom(size), AtmosphereStore.packaged()
    iterate(medium(store.get(*NODES[0]), composition_for(0.0), atom), atom, Recipe(), tolerance=1e3)
    worst = 0.0
    for node in NODES:
        start = time.process_time()
        surroundings = medium(store.get(*node), composition_for(node[2]), atom)
        prepared = time.process_time()
        result = iterate(surroundings, atom, Recipe())
        end = time.process_time()
        assert result.converged
        what = f"{atom.n_levels} levels, {atom.n_lines} lines ({surroundings.n_transfer} with transfer) at {node}"
        figure(f"{what}: background and profiles", prepared - start, "s")
        figure(f"{what}: {result.iterations} iterations", end - prepared, "s")
        worst = max(worst, end - start)
    figure(f"slowest model of {atom.n_levels} levels", worst, "s", limit="5 at about 236 levels")
    assert worst < (5.0 if size <= 236 else 10.0)


@pytest.mark.slow
def test_a_warm_start_saves_iterations(figure):
    """From a node 250 K away, mapped on the optical depth scale."""
    atom, store = packaged_atom(), AtmosphereStore.packaged()
    neighbour, node = (5500.0, 3.5, -2.5), NODES[1]
    composition = composition_for(node[2])
    start = iterate(medium(store.get(*neighbour), composition, atom), atom, Recipe())
    surroundings = medium(store.get(*node), composition, atom)
    cold, warm = iterate(surroundings, atom, Recipe()), iterate(surroundings, atom, Recipe(), start)
    figure("iterations from LTE", cold.iterations)
    figure("iterations from a neighbour", warm.iterations)
    assert warm.iterations < cold.iterations
    assert abs(warm.log_b - cold.log_b).max() < 2e-3


@pytest.mark.slow
def test_memory(figure):
    """Peak of a process that does nothing else."""
    done = subprocess.run([sys.executable, "-c", MEMORY], capture_output=True, text=True, check=True)
    peak = float(done.stdout)
    figure("peak memory of one model", peak, "GB", limit="1")
    assert peak < 1.0
