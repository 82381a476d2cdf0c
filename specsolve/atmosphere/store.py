"""The store of atmospheres: a header and one array, written once and opened read-only.

`atmospheres.json` (axes, status and reason of every node, provenance, checksum) is written last, by atomic rename;
`structures.npy` holds float64 (teff, logg, mh, quantity, depth) with the quantities of `QUANTITIES`.
"""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Mapping
from functools import cached_property
from importlib import resources
from pathlib import Path

import numpy as np

from specsolve.atmosphere.model import Atmosphere
from specsolve.durable import output_errors, write_atomically
from specsolve.errors import InputError, MissingNodeError, StoreError

SCHEMA = 1
HEADER_NAME = "atmospheres.json"
ARRAY_NAME = "structures.npy"
AXES = ("teff", "logg", "mh")
QUANTITIES = ("column_mass", "temperature", "gas_pressure", "electron_density", "log_tau")


class AtmosphereStore:
    """Atmospheres on a rectangular set of nodes, some of which may be missing.

    Attributes
    ----------
    axes : dict of ndarray
        Node values of teff [K], logg [dex cgs], mh [dex].
    identity : str
        SHA-256 of the array and of the status of all nodes.
    header : dict
        What was built, how, and when.

    Examples
    --------
    >>> from specsolve.atmosphere.store import AtmosphereStore
    >>> sun = AtmosphereStore.packaged().get(5750.0, 4.5, 0.0)
    >>> sun.status
    'converged'
    """

    def __init__(self, directory: Path, header: dict, structures: np.ndarray) -> None:
        self.directory = directory
        self.header = header
        self._structures = structures
        self.axes = {name: np.array(header["axes"][name]) for name in AXES}

    @classmethod
    def open(cls, directory: str | Path) -> AtmosphereStore:
        """Open a store directory.

        Raises
        ------
        StoreError
            Not a store, another schema, or a checksum that does not match.
        """
        directory = Path(directory)
        try:
            header = json.loads((directory / HEADER_NAME).read_text(encoding="utf-8"))
        except (OSError, ValueError) as problem:
            raise StoreError(
                f"{directory}: no readable {HEADER_NAME} ({problem}). Build one with `specsolve atmosphere build`.",
                path=str(directory),
            ) from problem
        if header.get("schema") != SCHEMA:
            raise StoreError(
                f"{directory}: atmosphere store of schema {header.get('schema')}, this version reads {SCHEMA}. "
                "Build it again with `specsolve atmosphere build`.",
                path=str(directory),
            )
        try:
            data = (directory / ARRAY_NAME).read_bytes()
        except OSError as problem:
            raise StoreError(f"{directory}: cannot read {ARRAY_NAME}: {problem}", path=str(directory)) from problem
        if hashlib.sha256(data).hexdigest() != header["checksum"]:
            raise StoreError(
                f"{directory}: {ARRAY_NAME} does not match its checksum (truncated or changed). "
                "Build it again with `specsolve atmosphere build`.",
                path=str(directory),
            )
        return cls(directory, header, np.load(io.BytesIO(data), allow_pickle=False))

    @classmethod
    def packaged(cls) -> AtmosphereStore:
        """The default store that comes with specsolve."""
        return cls.open(Path(str(resources.files("specsolve") / "data" / "atmospheres")))

    @cached_property
    def identity(self) -> str:
        """SHA-256 of the array checksum and of every node's status."""
        text = json.dumps([self.header["checksum"], self.header["axes"], self.header["nodes"]], sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()

    def nodes(self) -> list[tuple[float, float, float]]:
        """All (teff, logg, mh) of the axes, in the order of the array."""
        return [
            (float(t), float(g), float(m))
            for t in self.axes["teff"]
            for g in self.axes["logg"]
            for m in self.axes["mh"]
        ]

    def describe(self, teff: float, logg: float, mh: float) -> dict:
        """Status record of a node: `status`, `reason`, `flux_error`, `alpha`, `vmic`.

        Raises
        ------
        InputError
            The values are not a node.
        """
        index = self._index(teff, logg, mh)
        return self.header["nodes"][int(np.ravel_multi_index(index, self._structures.shape[:3]))]

    def has(self, teff: float, logg: float, mh: float) -> bool:
        """Whether the node holds a usable structure."""
        return self.describe(teff, logg, mh)["status"] in ("converged", "imported")

    def get(self, teff: float, logg: float, mh: float) -> Atmosphere:
        """The atmosphere of a node.

        Parameters
        ----------
        teff, logg, mh : float
            Exactly a node of the axes [K], [dex cgs], [dex].

        Raises
        ------
        InputError
            Not a node.
        MissingNodeError
            The node failed or was left out; carries the stored reason.
        """
        record = self.describe(teff, logg, mh)
        if record["status"] not in ("converged", "imported"):
            node = {"teff": teff, "logg": logg, "mh": mh}
            raise MissingNodeError(f"{record['status']} ({record['reason']})", node)
        values = self._structures[self._index(teff, logg, mh)]
        return Atmosphere(
            teff=teff, logg=logg, mh=mh, alpha=record["alpha"], vmic=record["vmic"], flux_error=record["flux_error"],
            status=record["status"], reason="", **dict(zip(QUANTITIES, values.copy(), strict=True)),
        )  # fmt: skip

    def _index(self, teff: float, logg: float, mh: float) -> tuple[int, int, int]:
        index = []
        for name, value in zip(AXES, (teff, logg, mh), strict=True):
            axis = self.axes[name]
            nearest = int(np.argmin(np.abs(axis - value)))
            if abs(axis[nearest] - value) > 1e-6 * max(1.0, abs(value)):
                listing = " ".join(f"{v:g}" for v in axis)
                raise InputError(f"{name} = {value:g} is not a node of this store. Nodes: {listing}.")
            index.append(nearest)
        return tuple(index)


def write_store(
    directory: str | Path,
    axes: Mapping[str, np.ndarray],
    atmospheres: Mapping[tuple[float, float, float], Atmosphere],
    provenance: dict,
) -> AtmosphereStore:
    """Write a store; nodes of the axes without an atmosphere are recorded as left out.

    Parameters
    ----------
    directory : path
        Made if it does not exist.
    axes : mapping of ndarray
        teff, logg, mh.
    atmospheres : mapping
        (teff, logg, mh) -> Atmosphere, failed ones included. All have the same number of depth points.
    provenance : dict
        Free header entries (JSON types).

    Returns
    -------
    AtmosphereStore
    """
    directory = Path(directory)
    with output_errors(directory):
        directory.mkdir(parents=True, exist_ok=True)
    n_depths = max(len(a.column_mass) for a in atmospheres.values())
    shape = tuple(len(axes[name]) for name in AXES)
    structures = np.full((*shape, len(QUANTITIES), n_depths), np.nan, dtype="<f8")
    records = []
    for index in np.ndindex(*shape):
        node = tuple(float(axes[name][i]) for name, i in zip(AXES, index, strict=True))
        model = atmospheres.get(node)
        if model is None:
            records.append({"status": "left out", "reason": "not among the nodes that were asked for",
                            "flux_error": None, "alpha": None, "vmic": None})  # fmt: skip
            continue
        if model.status in ("converged", "imported"):
            structures[index] = [getattr(model, name) for name in QUANTITIES]
        error = float(f"{model.flux_error:.2g}") if np.isfinite(model.flux_error) else None
        records.append({"status": model.status, "reason": model.reason, "flux_error": error,
                        "alpha": float(model.alpha), "vmic": float(model.vmic)})  # fmt: skip
    buffer = io.BytesIO()
    np.save(buffer, structures, allow_pickle=False)
    header = {
        "schema": SCHEMA,
        "axes": {name: [float(v) for v in axes[name]] for name in AXES},
        "units": {"teff": "K", "logg": "dex(cm / s2)", "mh": "dex", "column_mass": "g / cm2", "temperature": "K",
                  "gas_pressure": "dyn / cm2", "electron_density": "1 / cm3", "log_tau": "dex"},
        "quantities": list(QUANTITIES),
        "checksum": hashlib.sha256(buffer.getvalue()).hexdigest(),
        **provenance,
        "nodes": records,
    }  # fmt: skip
    write_atomically(directory / ARRAY_NAME, buffer.getvalue())
    write_atomically(directory / HEADER_NAME, json.dumps(header, indent=1).encode())
    return AtmosphereStore.open(directory)
