"""The store of departures: what comes back, what is refused, how a build goes on."""

import io

import numpy as np
import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.errors import InputError, MissingNodeError, StoreError
from specsolve.nlte import departures_build
from specsolve.nlte.departures import AXES, DEPTHS, STEP, DepartureStore, at_depths, write_departures
from specsolve.nlte.departures_build import build_departures, coarse_neighbours, part_path
from specsolve.nlte.equilibrium import Departures
from specsolve.nlte.recipe import Recipe

N_LEVELS = 5
HEADER = {"atom": 236, "n_levels": N_LEVELS, "atom_sha256": "0", "atom_source": "invented", "recipe": {}}
SHAPE = (3, 3, 2)


def invented(index) -> np.ndarray:
    """Linear in the indices, so that interpolation is exact."""
    return (
        0.1 * np.arange(N_LEVELS)[:, None] - 0.2 * index[0] + 0.05 * index[1] - 0.01 * index[2] * np.ones(len(DEPTHS))
    )


@pytest.fixture
def store(tmp_path):
    axes = {"teff": np.array([5000.0, 5250.0, 5500.0]), "logg": np.array([3.0, 3.5, 4.0]), "mh": np.array([-2.0, -1.5])}
    good = {"status": "converged", "reason": "", "iterations": 20, "change": 5e-5}
    records = {index: good for index in np.ndindex(*SHAPE)}
    records[2, 2, 1] = {"status": "failed", "reason": "populations not positive", "iterations": 3, "change": None}
    del records[0, 2, 0]
    values = {index: invented(index) for index, record in records.items() if record["status"] == "converged"}
    return write_departures(tmp_path / "store", axes, values, records, HEADER | {"atmospheres_identity": "a" * 64})


def test_nodes_come_back_within_half_a_step(store):
    np.testing.assert_allclose(store.log_b(5250.0, 3.5, -2.0), invented((1, 1, 0)), atol=0.51 * STEP)


def test_between_nodes_it_is_linear(store):
    found = store.log_b(5125.0, 3.25, -1.75)
    np.testing.assert_allclose(found, invented((0.5, 0.5, 0.5)), atol=0.51 * STEP)


def test_missing_nodes_and_the_outside_are_refused_with_the_reason(store):
    with pytest.raises(MissingNodeError, match="populations not positive"):
        store.log_b(5400.0, 3.9, -1.6)
    with pytest.raises(MissingNodeError, match="left out"):
        store.log_b(5000.0, 4.0, -2.0)
    with pytest.raises(InputError, match="outside the departures"):
        store.log_b(6000.0, 3.5, -2.0)
    assert store.unavailable(5250.0, 3.5, -2.0) == ""
    assert "not positive" in store.unavailable(5500.0, 4.0, -1.5)
    # a corner without weight does not matter
    store.log_b(5500.0, 3.5, -1.5)


def test_identity_follows_the_content(store, tmp_path):
    again = DepartureStore.open(store.directory)
    assert again.identity == store.identity
    array = store.directory / "departures.npz"
    whole = array.read_bytes()
    array.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(StoreError, match="no readable store"):
        DepartureStore.open(store.directory)
    with np.load(io.BytesIO(whole)) as data:
        codes = data["codes"]
    np.savez_compressed(array, codes=codes + np.int16(1))
    with pytest.raises(StoreError, match="checksum"):
        DepartureStore.open(store.directory)
    with pytest.raises(StoreError, match="no readable store"):
        DepartureStore.open(tmp_path)


def test_another_schema_is_refused(store):
    header = store.directory / "departures.json"
    header.write_text(header.read_text().replace('"schema": 1', '"schema": 99'))
    with pytest.raises(StoreError, match="schema 99"):
        DepartureStore.open(store.directory)


def test_a_solution_on_any_depths_is_taken_to_the_stored_ones():
    log_tau = np.linspace(-6.0, 1.6, 66)
    log_b = np.stack([-0.3 * np.exp(-((log_tau + 2.0) ** 2)), np.minimum(0.2 * log_tau, 0.0) ** 2 * 0.1])
    found = at_depths(log_b, log_tau)
    np.testing.assert_allclose(found[0], -0.3 * np.exp(-((np.array(DEPTHS) + 2.0) ** 2)), atol=1e-4)


def test_neighbours_of_a_node_are_coarse():
    assert coarse_neighbours((2, 4, 0), (13, 11, 8)) == []
    assert coarse_neighbours((3, 4, 0), (13, 11, 8)) == [(2, 4, 0), (4, 4, 0)]
    assert coarse_neighbours((2, 4, 7), (13, 11, 8)) == [(2, 4, 6)]
    assert len(coarse_neighbours((1, 1, 1), (13, 11, 8))) == 8


@pytest.fixture
def fake_solver(monkeypatch):
    """Departures that tell whether they had a start; one node fails."""
    calls = []

    def solve(atmosphere, recipe, size, start=None):
        calls.append((atmosphere.teff, atmosphere.logg, atmosphere.mh, start is not None))
        failed = (atmosphere.teff, atmosphere.logg) == (5500.0, 4.5)
        value = np.nan if failed else atmosphere.teff / 1e4 + (0.0 if start is None else 0.001)
        return Departures(
            log_b=np.full((236, 66), value), column_mass=atmosphere.column_mass, log_tau=atmosphere.log_tau,
            converged=not failed, iterations=7, change=1e-5, reason="invented failure" if failed else "",
        )  # fmt: skip

    monkeypatch.setattr(departures_build, "solve_node", solve)
    return calls


def nodes_of(store: AtmosphereStore) -> list:
    teff, logg, mh = (store.axes[name] for name in AXES)
    return [
        (int(np.argmin(abs(teff - t))), int(np.argmin(abs(logg - g))), int(np.argmin(abs(mh))))
        for t in (5500.0, 5750.0, 6000.0)
        for g in (4.0, 4.5)
    ]


def test_a_build_goes_coarse_first_and_on_after_an_interruption(fake_solver, tmp_path):
    atmospheres = AtmosphereStore.packaged()
    nodes = nodes_of(atmospheres)
    whole = build_departures(tmp_path / "whole", atmospheres=atmospheres, nodes=nodes)
    starts = [call[3] for call in fake_solver]
    assert not starts[0]
    assert starts == sorted(starts)  # all cold ones first
    index = nodes[1]
    assert whole.record(index)["status"] == "failed"
    assert whole.record(index)["reason"] == "invented failure"
    assert whole.atmospheres_identity == atmospheres.identity
    assert not (tmp_path / "whole" / "parts").exists()

    class Stop(Exception):
        pass

    def stop(done, total):
        if done == 3:
            raise Stop

    with pytest.raises(Stop):
        build_departures(tmp_path / "cut", atmospheres=atmospheres, nodes=nodes, progress=stop)
    kept = len(list((tmp_path / "cut" / "parts").glob("*.npz")))
    assert kept == 3
    with pytest.raises(StoreError, match="another recipe"):
        build_departures(tmp_path / "cut", atmospheres=atmospheres, nodes=nodes, recipe=Recipe(hydrogen_factor=0.1))
    before = len(fake_solver)
    again = build_departures(tmp_path / "cut", atmospheres=atmospheres, nodes=nodes)
    assert len(fake_solver) - before == len(nodes) - kept
    assert again.identity == whole.identity


def test_a_damaged_part_counts_as_none(fake_solver, tmp_path):
    atmospheres = AtmosphereStore.packaged()
    nodes = nodes_of(atmospheres)[:1]
    parts = tmp_path / "parts"
    parts.mkdir()
    part_path(parts, nodes[0]).write_bytes(b"PK cut short")
    build_departures(tmp_path, atmospheres=atmospheres, nodes=nodes)
    assert len(fake_solver) == 1
