"""First-order responses of the widths to what the axes of a grid do not hold: [alpha/Fe], the missing-opacity multiplier.

A perturbation p changes every width by p R, with R = d log10(W/lambda) / dp computed by the full engine (new opacity
tables, new atmospheres, new line formation) at some of the grid's nodes. Between these, R follows a cubic
radial-basis function in (teff, logg, mh), exact at the nodes, and polynomials in vmic and dA. Outside the hull of the
nodes that R was computed at there is none: nothing is extrapolated.

- "alpha": p = [alpha/Fe] minus the law that the atmospheres follow [dex];
- "missing_opacity": p = power of the multiplier minus one (see `specsolve.atmosphere.blanketing_calibration`).
"""

from __future__ import annotations

import io
import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.durable import write_atomically
from specsolve.errors import StoreError, UsageError

FORMAT_NAME = "specsolve first-order responses"
SCHEMA = 1
FILE_NAME = "perturbations.npz"
PACKAGED = Path(__file__).resolve().parent.parent / "data" / "perturbations" / FILE_NAME
STEP = 1e-4  # of the stored integers [dex per unit of p]
MISSING = np.iinfo(np.int16).min  # the integer of a response that could not be computed
NODE_SCALE = np.array([500.0, 1.0, 0.7])  # K, dex, dex: one unit of distance between nodes
KEPT_GRIDS = 8  # whose store is remembered
HULL_TOLERANCE = 1e-6
ALPHA, MISSING_OPACITY = "alpha", "missing_opacity"
# How far the response was computed for, and compared with the full engine: beyond, first order is not tested.
TESTED_RANGE: Mapping[str, float] = {ALPHA: 0.3, MISSING_OPACITY: 1.0}
REMAKE = "python -m specsolve.grid.perturbations_build --grid DIR --work FOLDER --output DIR"


@dataclass(frozen=True, eq=False)
class Perturbations:
    """Responses of the lines of a grid.

    Attributes
    ----------
    header : dict
        nodes by name of the perturbation, vmic, dA, line keys, identity of the atmospheres.
    responses : dict of str to ndarray of int16, shape (n_nodes, n_lines, n_vmic, n_dA)
        By the name of the perturbation, in steps of `STEP`.

    Examples
    --------
    >>> sorted(Perturbations.packaged().names)                                  # doctest: +SKIP
    ['alpha', 'missing_opacity']
    """

    header: dict[str, Any]
    responses: dict[str, np.ndarray]

    @classmethod
    def packaged(cls) -> Perturbations:
        """Those of the packaged grid."""
        return _read_once(str(PACKAGED))

    @classmethod
    def of_grid(cls, grid: Any) -> Perturbations:
        """Those in the folder of a grid, else the packaged ones if they fit.

        Raises
        ------
        UsageError
            If none fit its lines and atmospheres; the text says how to make them.
        """
        if grid.identity not in _OF_GRID:
            if len(_OF_GRID) > KEPT_GRIDS:
                _OF_GRID.clear()
            _OF_GRID[grid.identity] = _fitting(grid)
        return _OF_GRID[grid.identity]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the perturbations."""
        return tuple(self.responses)

    @cached_property
    def splines(self) -> dict[str, NodeSpline]:
        """Interpolation between the nodes, by name."""
        return {name: NodeSpline(np.array(nodes, float)) for name, nodes in self.header["nodes"].items()}

    @cached_property
    def keys(self) -> tuple[str, ...]:
        """Keys of the lines."""
        return tuple(self.header["lines"])

    def line_places(self, keys) -> np.ndarray:
        """Position of each line key, -1 where there is none."""
        place = self._place
        return np.array([place.get(key, -1) for key in np.asarray(keys).tolist()], dtype=np.int64)

    @cached_property
    def _place(self) -> dict[str, int]:
        return {key: i for i, key in enumerate(self.keys)}

    @cached_property
    def _flat(self) -> dict[str, np.ndarray]:
        """Responses as float32 of shape (n_nodes, n_lines n_vmic n_dA)."""
        return {
            name: (values.astype(np.float32) * np.float32(STEP)).reshape(len(values), -1)
            for name, values in self.responses.items()
        }

    def response(self, name: str, theta: np.ndarray, dA: np.ndarray, places: np.ndarray) -> np.ndarray:
        """R of some lines at one point.

        Parameters
        ----------
        name : str
        theta : ndarray, shape (4,)
            teff [K], logg, mh, vmic [km/s]; inside the grid that the responses belong to.
        dA : ndarray, shape (n_lines,)
            A(Fe) - solar iron - mh of each line [dex], inside the axis.
        places : ndarray of int, shape (n_lines,)
            Of the lines, see `line_places`.

        Returns
        -------
        ndarray, shape (n_lines,)
            d log10(W/lambda) / dp [dex per unit of p]; nan where dA leaves the axis.

        Examples
        --------
        >>> stored = Perturbations.packaged()                                   # doctest: +SKIP
        >>> stored.response("alpha", (5000.0, 2.0, -1.0, 1.5), dA, stored.line_places(keys))  # doctest: +SKIP
        """
        weights = self.splines[name].weights(np.asarray(theta, float)[None, :3])[0].astype(np.float32)
        at_point = (weights @ self._flat[name]).reshape(self.responses[name].shape[1:])[places].astype(float)
        vmic = polynomial_weights(self.header["vmic"], np.array([theta[3]]))[0]
        curve = np.einsum("lvd,v->ld", at_point, vmic)
        inside = (dA >= self.header["dA"][0]) & (dA <= self.header["dA"][-1])
        along = polynomial_weights(self.header["dA"], np.where(inside, dA, 0.0))
        return np.where(inside, np.einsum("ld,ld->l", curve, along), np.nan)

    def expanded(self, name: str, grid: Any) -> np.ndarray:
        """R at all nodes of a grid, float32 of shape (n_nodes_of_grid, n_lines, n_vmic, n_dA), in its order of lines.

        nan at nodes outside the hull of those that R was computed at.
        """
        axes = [np.asarray(axis.values, float) for axis in grid.node_axes]
        points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
        operator = self.splines[name].weights(points)
        operator[~self.splines[name].holds(points)] = np.nan
        operator = operator.astype(np.float32)
        line_axes = [np.asarray(axis.values, float) for axis in grid.line_axes]
        vmic = polynomial_weights(self.header["vmic"], line_axes[0]).astype(np.float32)
        dA = polynomial_weights(self.header["dA"], line_axes[1]).astype(np.float32)
        stored = self.responses[name][:, self.line_places(grid.lines.key)].astype(np.float32) * np.float32(STEP)
        n_nodes, n_lines = stored.shape[:2]
        at_nodes = (operator @ stored.reshape(n_nodes, -1)).reshape(len(points) * n_lines, *stored.shape[2:])
        full = np.matmul(np.matmul(vmic, at_nodes), dA.T)
        return full.reshape(len(points), n_lines, *full.shape[1:])


_OF_GRID: dict[str, Perturbations] = {}


def _fitting(grid: Any) -> Perturbations:
    own = Path(grid.directory) / FILE_NAME
    found = _read_once(str(own)) if own.exists() else Perturbations.packaged()
    if found.header["atmospheres_identity"] != grid.atmospheres_identity:
        raise UsageError(f"the stored responses to [alpha/Fe] are of other atmospheres than this grid; run {REMAKE}")
    absent = int(np.count_nonzero(found.line_places(grid.lines.key) < 0))
    if absent:
        raise UsageError(
            f"{absent} of {len(grid.lines)} lines of this grid have no stored response to [alpha/Fe]; run {REMAKE}"
        )
    return found


class NodeSpline:
    """The cubic spline |x - x_i|^3 with a quadratic polynomial through values at scattered nodes.

    Exact at the nodes, and everywhere for a quadratic; see for example Wendland 2005, Scattered Data Approximation,
    chapter 8.

    Parameters
    ----------
    nodes : ndarray, shape (n_nodes, 3)
        teff [K], logg, mh.
    """

    def __init__(self, nodes: np.ndarray) -> None:
        self.nodes = nodes
        self._x = nodes / NODE_SCALE
        polynomial = _polynomial_terms(self._x)
        n, m = polynomial.shape
        system = np.zeros((n + m, n + m))
        system[:n, :n] = _radial(self._x, self._x)
        system[:n, n:], system[n:, :n] = polynomial, polynomial.T
        self._inverse = np.linalg.inv(system)[:, :n]

    def weights(self, points: np.ndarray) -> np.ndarray:
        """Weights of the nodes at points (n_points, 3), shape (n_points, n_nodes)."""
        x = np.atleast_2d(points) / NODE_SCALE
        return np.hstack([_radial(x, self._x), _polynomial_terms(x)]) @ self._inverse

    def holds(self, points: np.ndarray) -> np.ndarray:
        """Whether points (n_points, 3) lie inside the hull of the nodes; bool, shape (n_points,)."""
        return self._hull.find_simplex(np.atleast_2d(points) / NODE_SCALE, tol=HULL_TOLERANCE) >= 0

    @cached_property
    def _hull(self) -> Any:
        from scipy.spatial import Delaunay

        return Delaunay(self._x)


def _radial(x: np.ndarray, nodes: np.ndarray) -> np.ndarray:
    square = ((x[:, None, :] - nodes[None, :, :]) ** 2).sum(axis=2)
    return square * np.sqrt(square)


def _polynomial_terms(x: np.ndarray) -> np.ndarray:
    a, b, c = x.T
    return np.stack([np.ones_like(a), a, b, c, a * a, b * b, c * c, a * b, a * c, b * c], axis=1)


def polynomial_weights(nodes, at: np.ndarray) -> np.ndarray:
    """Lagrange weights of the polynomial through all nodes, shape (n_points, n_nodes).

    Examples
    --------
    >>> polynomial_weights([0.0, 1.0, 2.0], [0.5]).tolist()
    [[0.375, 0.75, -0.125]]
    """
    nodes, at = np.asarray(nodes, float), np.asarray(at, float)
    weights = np.ones((at.size, nodes.size))
    for j, x in enumerate(nodes):
        for k, other in enumerate(nodes):
            if k != j:
                weights[:, j] *= (at - other) / (x - other)
    return weights


def write_perturbations(path: str | Path, header: Mapping[str, Any], responses: Mapping[str, np.ndarray]) -> None:
    """Write responses [dex per unit of p] as scaled integers.

    Parameters
    ----------
    path : path-like
    header : mapping
        names of what the arrays belong to; JSON types.
    responses : mapping of str to ndarray, shape (n_nodes, n_lines, n_vmic, n_dA)

    Raises
    ------
    ValueError
        If a response is not finite or too large to be stored.
    """
    arrays = {}
    for name, values in responses.items():
        scaled = np.rint(np.asarray(values) / STEP)
        if not np.isfinite(scaled).all() or np.abs(scaled).max() > np.iinfo(np.int16).max:
            raise ValueError(f"response to {name} is not finite or too large")
        # lines first: neighbouring numbers are alike, which the compression wants
        arrays[f"response_{name}"] = np.ascontiguousarray(scaled.astype("<i2").transpose(1, 2, 3, 0))
    text = json.dumps({"format": FORMAT_NAME, "schema": SCHEMA, **header}, sort_keys=True)
    buffer = io.BytesIO()
    np.savez_compressed(buffer, header=np.array(text), **arrays)
    write_atomically(Path(path), buffer.getvalue())


def read_perturbations(path: str | Path) -> Perturbations:
    """Read a store of responses.

    Raises
    ------
    StoreError
    """
    try:
        with np.load(path, allow_pickle=False) as stored:
            header = json.loads(str(stored["header"]))
            arrays = {
                name.removeprefix("response_"): np.ascontiguousarray(stored[name].transpose(3, 0, 1, 2))
                for name in stored.files
                if name != "header"
            }
    except (OSError, ValueError, KeyError, EOFError) as error:
        raise StoreError(f"{path} cannot be read ({error}); make it anew: {REMAKE}", path=path) from error
    if header.get("format") != FORMAT_NAME or header.get("schema") != SCHEMA:
        raise StoreError(f"{path} is not a store of responses of schema {SCHEMA}", path=path)
    return Perturbations(header, arrays)


@lru_cache(maxsize=4)
def _read_once(path: str) -> Perturbations:
    return read_perturbations(path)
