"""An atmosphere between the nodes of a store, without converging one there.

Good enough for what depends weakly on the structure, such as differences between two treatments of the same lines; line
abundances themselves want `specsolve.grid.check.converged_atmosphere`.
"""

from __future__ import annotations

import numpy as np

from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import AXES, AtmosphereStore
from specsolve.errors import InputError, MissingNodeError


def atmosphere_between(store: AtmosphereStore, teff: float, logg: float, mh: float) -> Atmosphere:
    """Structure at any point inside a store; at a node the stored one.

    Logarithms of column mass, temperature, pressure and electron density at equal optical depth, linear in the parameters.

    Raises
    ------
    InputError
        Outside the store.
    MissingNodeError
        A corner of the cell has no atmosphere.
    """
    corners = corners_of(store, (teff, logg, mh))
    models = []
    for node, weight in corners:
        if not store.has(*node):
            record = store.describe(*node)
            raise MissingNodeError(f"{record['status']} ({record['reason']})", dict(zip(AXES, node, strict=True)))
        models.append((store.get(*node), weight))
    if len(models) == 1:
        return models[0][0]
    log_tau = models[0][0].log_tau
    names = ("column_mass", "temperature", "gas_pressure", "electron_density")
    values = {name: 0.0 for name in names}
    for model, weight in models:
        for name in names:
            values[name] = values[name] + weight * np.interp(log_tau, model.log_tau, np.log(getattr(model, name)))
    numbers = {name: float(sum(w * getattr(model, name) for model, w in models)) for name in ("alpha", "vmic")}
    return Atmosphere(
        teff=teff, logg=logg, mh=mh, log_tau=log_tau, flux_error=float("nan"), status="imported",
        reason="interpolated between nodes", **numbers, **{name: np.exp(array) for name, array in values.items()},
    )  # fmt: skip


def corners_of(store: AtmosphereStore, point: tuple[float, float, float]) -> list[tuple[tuple[float, ...], float]]:
    """Nodes around a point and their weights; those without weight are left out."""
    found: list[tuple[tuple[float, ...], float]] = [((), 1.0)]
    for name, value in zip(AXES, point, strict=True):
        axis = store.axes[name]
        if not axis[0] - 1e-6 <= value <= axis[-1] + 1e-6:
            raise InputError(f"{name} = {value:g} lies outside the atmospheres ({axis[0]:g} to {axis[-1]:g})")
        low = int(np.clip(np.searchsorted(axis, value, side="right") - 1, 0, max(axis.size - 2, 0)))
        share = (value - axis[low]) / (axis[low + 1] - axis[low]) if axis.size > 1 else 0.0
        ends = [(float(axis[low + k]), w) for k, w in ((0, 1.0 - share), (1, share)) if w > 1e-9]
        found = [((*node, end), weight * w) for node, weight in found for end, w in ends]
    return found
