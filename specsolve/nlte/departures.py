"""The store of departures: ln b of all levels on a few depths, at the nodes of a store of atmospheres.

`departures.json` (axes, depths, status and reason of every node, recipe, atom, identity of the atmospheres, checksum) is
written last, by atomic rename; `departures.npz` holds, compressed, int16 (teff, logg, mh, level, depth) in steps of `STEP`.
"""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Mapping
from functools import cached_property
from importlib import resources
from pathlib import Path
from zipfile import BadZipFile

import numpy as np
from scipy.interpolate import CubicSpline

from specsolve.durable import output_errors, write_atomically
from specsolve.errors import InputError, MissingNodeError, StoreError
from specsolve.lines import LineList
from specsolve.nlte.line_levels import line_levels

SCHEMA = 1
HEADER_NAME = "departures.json"
ARRAY_NAME = "departures.npz"
AXES = ("teff", "logg", "mh")
#: log10 of optical depth at 5000 A at which departures are stored.
DEPTHS = (-6.0, -5.2, -4.5, -3.9, -3.4, -3.0, -2.6, -2.2, -1.8, -1.4, -1.0, -0.6, -0.2, 0.3, 0.9, 1.6)
#: Step of the stored ln b, and the code of what is missing.
STEP, MISSING = 5e-4, -32768


class LineDepartures:
    """Departure coefficients of the levels of lines as a function of depth: what line formation takes.

    Parameters
    ----------
    log_b : ndarray, shape (n_levels, n_depths)
    depths : ndarray, shape (n_depths,)
        log tau_5000.
    lower, upper : ndarray of int, shape (n_lines,)

    Examples
    --------
    >>> flat = LineDepartures(np.zeros((2, 16)), np.array(DEPTHS), np.array([0]), np.array([1]))
    >>> [b.tolist() for b in flat(np.array([-1.5]))]
    [[[1.0]], [[1.0]]]
    """

    def __init__(self, log_b: np.ndarray, depths: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> None:
        self._log_b, self._depths, self._lower, self._upper = log_b, depths, lower, upper

    def __call__(self, log_tau: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """b of the lower and the upper levels, each (n_lines, n); beyond the stored depths the end value."""
        used, inverse = np.unique(np.concatenate([self._lower, self._upper]), return_inverse=True)
        place = np.clip(log_tau, self._depths[0], self._depths[-1])
        b = np.exp(CubicSpline(self._depths, self._log_b[used], axis=1)(place))[inverse]
        return b[: self._lower.size], b[self._lower.size :]


class DepartureStore:
    """Departures on the nodes of a store of atmospheres, some of which may be missing.

    Attributes
    ----------
    axes : dict of ndarray
        teff [K], logg [dex cgs], mh [dex].
    depths : ndarray, shape (n_depths,)
    header : dict

    Examples
    --------
    >>> store = DepartureStore.packaged()                                       # doctest: +SKIP
    >>> store.log_b(5750.0, 3.5, -2.5).shape                                    # doctest: +SKIP
    (236, 16)
    """

    def __init__(self, directory: Path, header: dict, codes: np.ndarray) -> None:
        self.directory, self.header, self._codes = directory, header, codes
        self.axes = {name: np.array(header["axes"][name]) for name in AXES}
        self.depths = np.array(header["depths"])

    @classmethod
    def open(cls, directory: str | Path) -> DepartureStore:
        """Open a store directory.

        Raises
        ------
        StoreError
            Not a store, another schema, or a checksum that does not match.
        """
        directory = Path(directory)
        try:
            header = json.loads((directory / HEADER_NAME).read_text(encoding="utf-8"))
            with open(directory / ARRAY_NAME, "rb") as stream, np.load(stream, allow_pickle=False) as data:
                codes = data["codes"]
        except (OSError, ValueError, KeyError, EOFError, BadZipFile) as problem:
            raise StoreError(
                f"{directory}: no readable store of departures ({problem}). Build one with `specsolve departures "
                "build`.", path=str(directory),
            ) from problem  # fmt: skip
        if header.get("schema") != SCHEMA:
            raise StoreError(
                f"{directory}: departures of schema {header.get('schema')}, this version reads {SCHEMA}. Build them "
                "again with `specsolve departures build`.", path=str(directory),
            )  # fmt: skip
        if npy_sha256(codes) != header["checksum"]:
            raise StoreError(
                f"{directory}: {ARRAY_NAME} does not match its checksum (truncated or changed). Build it again with "
                "`specsolve departures build`.", path=str(directory),
            )  # fmt: skip
        return cls(directory, header, codes)

    @classmethod
    def packaged(cls) -> DepartureStore:
        """The store that comes with specsolve."""
        return cls.open(packaged_folder())

    @cached_property
    def identity(self) -> str:
        """SHA-256 of the array checksum, the status of every node, the atom, the recipe and the atmospheres."""
        names = ("checksum", "axes", "depths", "nodes", "atom_sha256", "recipe", "atmospheres_identity")
        text = json.dumps([self.header[name] for name in names], sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()

    @property
    def atmospheres_identity(self) -> str:
        """Identity of the atmospheres that the departures belong to."""
        return self.header["atmospheres_identity"]

    @property
    def size(self) -> int:
        """Which of the packaged model atoms it is of."""
        return int(self.header["atom"])

    def record(self, index: tuple[int, int, int]) -> dict:
        """Status of a node given by indices: `status`, `reason`, `iterations`, `change`."""
        return self.header["nodes"][int(np.ravel_multi_index(index, self._codes.shape[:3]))]

    def log_b(self, teff: float, logg: float, mh: float) -> np.ndarray:
        """ln b of all levels, shape (n_levels, n_depths): stored at a node, between nodes linear in the parameters.

        Raises
        ------
        InputError
            Outside the axes.
        MissingNodeError
            A node that takes part has no departures; carries its reason.
        """
        total = 0.0
        for index, weight in self._corners(teff, logg, mh):
            record = self.record(index)
            if record["status"] != "converged":
                node = {name: float(self.axes[name][i]) for name, i in zip(AXES, index, strict=True)}
                raise MissingNodeError(f"no departures: {record['status']} ({record['reason']})", node)
            total = total + weight * (self._codes[index] * STEP)
        return total

    def unavailable(self, teff: float, logg: float, mh: float) -> str:
        """Why there are no departures at a point; empty if there are."""
        try:
            self.log_b(teff, logg, mh)
        except MissingNodeError as error:
            return error.reason
        except InputError as error:
            return str(error)
        return ""

    def of_lines(self, lines: LineList, teff: float, logg: float, mh: float) -> LineDepartures:
        """Departures of the levels of lines, for `formation.reduced_widths`."""
        found = line_levels(lines, self.size)
        return LineDepartures(self.log_b(teff, logg, mh), self.depths, found.lower, found.upper)

    def _corners(self, teff: float, logg: float, mh: float) -> list[tuple[tuple[int, int, int], float]]:
        choices = []
        for name, value in zip(AXES, (teff, logg, mh), strict=True):
            axis = self.axes[name]
            if not axis[0] - 1e-6 <= value <= axis[-1] + 1e-6:
                raise InputError(f"{name} = {value:g} lies outside the departures ({axis[0]:g} to {axis[-1]:g})")
            low = int(np.clip(np.searchsorted(axis, value, side="right") - 1, 0, max(axis.size - 2, 0)))
            share = (value - axis[low]) / (axis[low + 1] - axis[low]) if axis.size > 1 else 0.0
            choices.append([(low + k, w) for k, w in ((0, 1.0 - share), (1, share)) if w > 1e-9])
        return [((i, j, k), u * v * w) for i, u in choices[0] for j, v in choices[1] for k, w in choices[2]]


def npy_sha256(codes: np.ndarray) -> str:
    """SHA-256 (hex) of the array as an .npy file, however it is compressed."""
    buffer = io.BytesIO()
    np.save(buffer, codes, allow_pickle=False)
    return hashlib.sha256(buffer.getvalue()).hexdigest()


def packaged_folder() -> Path:
    """Folder of the packaged store."""
    return Path(str(resources.files("specsolve") / "data" / "departures"))


def at_depths(log_b: np.ndarray, log_tau: np.ndarray) -> np.ndarray:
    """ln b of a solution at the stored depths, shape (n_levels, n_depths)."""
    place = np.clip(DEPTHS, log_tau[0], log_tau[-1])
    return CubicSpline(log_tau, log_b, axis=1)(place)


def write_departures(
    directory: str | Path,
    axes: Mapping[str, np.ndarray],
    values: Mapping[tuple[int, int, int], np.ndarray],
    records: Mapping[tuple[int, int, int], dict],
    header: Mapping,
) -> DepartureStore:
    """Write a store.

    Parameters
    ----------
    directory : path
    axes : mapping of ndarray
    values : mapping
        Index -> ln b (n_levels, n_depths) of the converged nodes.
    records : mapping
        Index -> status record; nodes without one are written as left out.
    header : mapping
        `atom` (its size), `atom_sha256`, `n_levels`, `recipe`, `atmospheres_identity`, provenance.
    """
    directory = Path(directory)
    with output_errors(directory):
        directory.mkdir(parents=True, exist_ok=True)
    shape = tuple(len(axes[name]) for name in AXES)
    n_levels = int(header["n_levels"])
    codes = np.full((*shape, n_levels, len(DEPTHS)), MISSING, dtype="<i2")
    for index, log_b in values.items():
        codes[index] = np.clip(np.rint(log_b / STEP), MISSING + 1, -MISSING - 1)
    left_out = {"status": "left out", "reason": "no atmosphere, or not among the nodes that were asked for"}
    nodes = [dict(records.get(index, left_out)) for index in np.ndindex(*shape)]
    buffer = io.BytesIO()
    np.savez_compressed(buffer, codes=codes)
    content = {
        "schema": SCHEMA,
        "quantity": "ln(n / n_LTE) of the levels of the model atom",
        "array_order": [*AXES, "level", "depth"],
        "step": STEP,
        "missing": MISSING,
        "axes": {name: [float(v) for v in axes[name]] for name in AXES},
        "depths": list(DEPTHS),
        "units": {"teff": "K", "logg": "dex(cm / s2)", "mh": "dex", "depths": "log10 tau at 5000 Angstrom"},
        "checksum": npy_sha256(codes),
        **header,
        "nodes": nodes,
    }
    write_atomically(directory / ARRAY_NAME, buffer.getvalue())
    write_atomically(directory / HEADER_NAME, json.dumps(content, indent=1, allow_nan=False).encode())
    return DepartureStore.open(directory)
