"""Stand-ins for atmospheres and line formation: the formulas of `synthetic`, fast enough to build grids in a test."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.errors import MissingNodeError
from specsolve.grid.engine import Engine
from tests.grid.synthetic import synthetic_log_widths

TEFF = np.arange(5000.0, 6001.0, 250.0)
LOGG = np.array([3.5, 4.0, 4.5])
MH = np.array([-0.5, 0.0])


@dataclass(frozen=True)
class Model:
    """What the engine double needs of an atmosphere."""

    teff: float
    logg: float
    mh: float
    alpha: float = 0.0


class Atmospheres:
    """A store of `Model` with one failed node."""

    def __init__(self, identity: str = "a" * 64, failed: tuple[float, float, float] = (5000.0, 4.5, -0.5)):
        self.axes = {"teff": TEFF, "logg": LOGG, "mh": MH}
        self.identity = identity
        self.failed = failed

    def get(self, teff: float, logg: float, mh: float) -> Model:
        if (teff, logg, mh) == self.failed:
            raise MissingNodeError("failed (not converged after 120 iterations)")
        return Model(teff, logg, mh)


def widths(model, lines, vmic, dA):
    grid = np.meshgrid(vmic, dA, indexing="ij")
    return np.moveaxis(synthetic_log_widths(lines, model.teff, model.logg, model.mh, *grid), -1, 0)


def shifted_widths(model, lines, vmic, dA):
    """As another program version would compute them."""
    return widths(model, lines, vmic, dA) + 0.01


def broken_widths(model, lines, vmic, dA):
    if model.teff > 5500.0:
        raise ValueError("the temperature leaves the table")
    return widths(model, lines, vmic, dA)


ENGINE = Engine(widths, {"name": "double", "sources_sha256": "1"})
SHIFTED = Engine(shifted_widths, {"name": "double", "sources_sha256": "2"})
BROKEN = Engine(broken_widths, {"name": "double", "sources_sha256": "3"})
