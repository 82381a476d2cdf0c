"""The atmosphere store: round trip, refusal of what is not whole, resumption, import of a user's tables."""

from __future__ import annotations

import json

import numpy as np
import pytest

from specsolve.atmosphere import build as building
from specsolve.atmosphere.importing import import_store
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import ARRAY_NAME, HEADER_NAME, AtmosphereStore, write_store
from specsolve.errors import ColumnError, InputError, MissingNodeError, StoreError, UnitError
from specsolve.report.atmosphere import structure_table


def toy(teff, logg, mh, status="converged"):
    tau = 10.0 ** np.linspace(-5, 2, 40)
    temperature = teff * (0.75 * (tau + 0.7)) ** 0.25
    mass = 3.0 * tau**0.6
    return Atmosphere(
        teff=teff, logg=logg, mh=mh, alpha=0.0, vmic=1.0, column_mass=mass, temperature=temperature,
        gas_pressure=10**logg * mass, electron_density=1e12 * tau**0.5, log_tau=np.log10(tau), flux_error=1e-6,
        status=status, reason="" if status == "converged" else "made to fail",
    )  # fmt: skip


AXES = {"teff": np.array([5000.0, 5250.0]), "logg": np.array([4.0, 4.5]), "mh": np.array([0.0])}


@pytest.fixture
def store(tmp_path):
    models = {(t, g, 0.0): toy(t, g, 0.0) for t in AXES["teff"] for g in AXES["logg"]}
    models[(5250.0, 4.5, 0.0)] = toy(5250.0, 4.5, 0.0, "failed")
    del models[(5250.0, 4.0, 0.0)]
    return write_store(tmp_path / "store", AXES, models, {})


def test_round_trip_is_exact(store):
    back = AtmosphereStore.open(store.directory).get(5000.0, 4.5, 0.0)
    for name in ("column_mass", "temperature", "gas_pressure", "electron_density", "log_tau"):
        np.testing.assert_array_equal(getattr(back, name), getattr(toy(5000.0, 4.5, 0.0), name))


def test_failed_and_left_out_nodes_say_so(store):
    with pytest.raises(MissingNodeError, match="made to fail"):
        store.get(5250.0, 4.5, 0.0)
    with pytest.raises(MissingNodeError, match="left out"):
        store.get(5250.0, 4.0, 0.0)
    with pytest.raises(InputError, match="not a node"):
        store.get(5100.0, 4.5, 0.0)


@pytest.mark.parametrize("harm", ["truncate", "schema", "no header", "header cut"])
def test_damaged_store_is_refused(store, harm):
    array, header = store.directory / ARRAY_NAME, store.directory / HEADER_NAME
    if harm == "truncate":
        array.write_bytes(array.read_bytes()[:-100])
    elif harm == "schema":
        header.write_text(json.dumps({**json.loads(header.read_text()), "schema": 99}))
    elif harm == "no header":
        header.unlink()
    else:
        header.write_text(header.read_text()[:200])
    with pytest.raises(StoreError):
        AtmosphereStore.open(store.directory)


def test_identity_depends_on_content(store, tmp_path):
    other = write_store(tmp_path / "other", AXES, {(5000.0, 4.0, 0.0): toy(5000.0, 4.0, 0.0)}, {})
    assert other.identity != store.identity
    assert AtmosphereStore.open(store.directory).identity == store.identity


def test_interrupted_build_goes_on(tmp_path, monkeypatch):
    """A node that is on disk is not computed again; parts of another configuration are refused."""
    computed = []

    def fake(node, done, mh, blanketing, power):
        computed.append(node)
        if len(computed) == 2:
            raise KeyboardInterrupt
        return toy(*node, mh)

    monkeypatch.setattr(building, "converge_node", fake)
    monkeypatch.setattr(building, "blanketing_for", lambda mh: None)
    from concurrent.futures import ThreadPoolExecutor

    with ThreadPoolExecutor(1) as pool, pytest.raises(KeyboardInterrupt):
        building.build_store(tmp_path, teff=[5500.0, 5750.0], logg=[4.5], mh=[0.0], executor=pool)
    with ThreadPoolExecutor(1) as pool, pytest.raises(StoreError, match="another configuration"):
        building.build_store(tmp_path, teff=[5500.0, 5750.0], logg=[4.5], mh=[0.0], executor=pool, power=2.0)
    with ThreadPoolExecutor(1) as pool:
        store = building.build_store(tmp_path, teff=[5500.0, 5750.0], logg=[4.5], mh=[0.0], executor=pool)
    assert len(computed) == 3
    assert all(store.has(t, 4.5, 0.0) for t in (5500.0, 5750.0))


def test_own_structures_are_imported(tmp_path):
    paths = []
    for teff in (5000.0, 5250.0):
        paths.append(tmp_path / f"{teff:g}.ecsv")
        structure_table(toy(teff, 4.5, 0.0)).write(paths[-1], format="ascii.ecsv")
    store = import_store(tmp_path / "own", paths)
    back = store.get(5250.0, 4.5, 0.0)
    assert back.status == "imported"
    np.testing.assert_allclose(back.temperature, toy(5250.0, 4.5, 0.0).temperature, rtol=1e-12)


def damaged(table, how):
    if how == "meta":
        del table.meta["logg"]
    elif how == "column":
        table.remove_column("gas_pressure")
    elif how == "unit":
        table["temperature"] = table["temperature"].value
    elif how == "wrong unit":
        table["temperature"] = table["column_mass"]
    elif how == "negative":
        table["gas_pressure"][3] *= -1
    elif how == "order":
        table["column_mass"][3] = table["column_mass"][5]
    elif how == "gravity":
        table.meta["logg"] = 3.0
    elif how == "shallow":
        table = table[:25]
    return table


@pytest.mark.parametrize(
    ("how", "error"),
    [("meta", InputError), ("column", ColumnError), ("unit", UnitError), ("wrong unit", UnitError), ("negative", InputError),
     ("order", InputError), ("gravity", InputError), ("shallow", InputError)],
)  # fmt: skip
def test_bad_structures_are_refused(tmp_path, how, error):
    path = tmp_path / "bad.ecsv"
    damaged(structure_table(toy(5000.0, 4.5, 0.0)), how).write(path, format="ascii.ecsv")
    with pytest.raises(error) as caught:
        import_store(tmp_path / "own", [path])
    assert "\n" not in str(caught.value)


def test_twice_the_same_node_is_refused(tmp_path):
    paths = [tmp_path / "a.ecsv", tmp_path / "b.ecsv"]
    for path in paths:
        structure_table(toy(5000.0, 4.5, 0.0)).write(path, format="ascii.ecsv")
    with pytest.raises(InputError, match="both"):
        import_store(tmp_path / "own", paths)
