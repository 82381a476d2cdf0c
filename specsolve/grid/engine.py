"""What computes equivalent widths for a grid: one atmosphere in, the widths of all lines out."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache, partial
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.errors import SpecsolveError
from specsolve.grid.codes import encode
from specsolve.lines import LineList

if TYPE_CHECKING:
    from specsolve.nlte.departures import DepartureStore

FORMATION_SOURCES = ("formation", "matter", "radiation", "lines/wavelengths.py", "constants.py", "data/matter")
"""Program text and tables that decide a width."""

SECONDS_PER_WIDTH = 2e-5
"""Time of one width on one core, for estimates [s]; measured with 210 lines."""

SECONDS_PER_NODE = 1.2e-2
"""Time at a node that does not depend on the lines: reading, equation of state, continuum [s]; measured."""

WATCH_S = 0.5
"""How often a worker looks whether its parent still lives [s]."""


@dataclass(frozen=True)
class Engine:
    """A function that computes widths, and what identifies it.

    Attributes
    ----------
    widths : callable
        ``widths(atmosphere, lines, vmic, dA)`` -> log10(W/lambda), shape (n_lines, n_vmic, n_dA). A module-level
        function, so that worker processes find it.
    version : mapping
        Names and hashes; equal versions give equal numbers.
    unavailable : callable, optional
        ``unavailable(teff, logg, mh)`` -> why there are no widths at a node although it has an atmosphere; empty if
        there are. Without it there are widths wherever there is an atmosphere.
    atmospheres_identity : str
        Of the only store of atmospheres that it may be used with; empty for any.
    """

    widths: Callable[[Any, LineList, np.ndarray, np.ndarray], np.ndarray]
    version: Mapping[str, str]
    unavailable: Callable[[float, float, float], str] | None = None
    atmospheres_identity: str = ""


def lte_widths(atmosphere, lines: LineList, vmic: np.ndarray, dA: np.ndarray) -> np.ndarray:
    """log10(W/lambda) in LTE, shape (n_lines, n_vmic, n_dA); abundances are SOLAR_IRON + mh + dA.

    Parameters
    ----------
    atmosphere : specsolve.atmosphere.model.Atmosphere
    lines : LineList
    vmic : ndarray, shape (n_vmic,)
        [km/s].
    dA : ndarray, shape (n_dA,)
        [dex].
    """
    from specsolve.formation.equivalent_width import reduced_widths
    from specsolve.matter.composition import composition_for

    composition = composition_for(atmosphere.mh, atmosphere.alpha)
    return reduced_widths(atmosphere, composition, lines, vmic, SOLAR_IRON + atmosphere.mh + dA)


def lte_engine() -> Engine:
    """The engine of the treatment "lte"."""
    from specsolve import __version__
    from specsolve.atmosphere.build import sources_hash

    return Engine(
        lte_widths, {"name": "lte", "specsolve": __version__, "sources_sha256": sources_hash(FORMATION_SOURCES)}
    )


def nlte_widths(directory: str, identity: str, atmosphere, lines: LineList, vmic: np.ndarray, dA: np.ndarray):
    """As `lte_widths`, with the departures that a store has at the atmosphere's node.

    Parameters
    ----------
    directory, identity : str
        Of a store of departures.
    """
    from specsolve.formation.equivalent_width import reduced_widths
    from specsolve.matter.composition import composition_for

    composition = composition_for(atmosphere.mh, atmosphere.alpha)
    departures = opened_departures(directory, identity).of_lines(lines, atmosphere.teff, atmosphere.logg, atmosphere.mh)
    abundances = SOLAR_IRON + atmosphere.mh + dA
    return reduced_widths(atmosphere, composition, lines, vmic, abundances, departures=departures)


@lru_cache(maxsize=4)
def opened_departures(directory: str, identity: str) -> DepartureStore:
    """A store of departures, opened once a process.

    Raises
    ------
    StoreError
        It is not the one of that identity.
    """
    from specsolve.errors import StoreError
    from specsolve.nlte.departures import DepartureStore

    store = DepartureStore.open(directory)
    if store.identity != identity:
        raise StoreError(f"{directory} has changed while it was in use; start again", path=directory)
    return store


def nlte_engine(departures: DepartureStore | None = None) -> Engine:
    """The engine of the treatment "nlte".

    Parameters
    ----------
    departures : DepartureStore, optional
        The packaged ones by default.
    """
    from specsolve import __version__
    from specsolve.atmosphere.build import sources_hash
    from specsolve.nlte.departures import DepartureStore

    store = DepartureStore.packaged() if departures is None else departures
    return Engine(
        partial(nlte_widths, str(store.directory), store.identity),
        {
            "name": "nlte",
            "specsolve": __version__,
            "sources_sha256": sources_hash(FORMATION_SOURCES),
            "departures": store.identity,
        },
        store.unavailable,
        store.atmospheres_identity,
    )


def solved_widths(atmosphere, lines: LineList, vmic: np.ndarray, dA: np.ndarray) -> np.ndarray:
    """As `nlte_widths`, with departures solved for this very atmosphere (some seconds)."""
    from specsolve.formation.equivalent_width import reduced_widths
    from specsolve.matter.composition import composition_for
    from specsolve.nlte.corrections import departures_of

    composition = composition_for(atmosphere.mh, atmosphere.alpha)
    abundances = SOLAR_IRON + atmosphere.mh + dA
    departures = departures_of(atmosphere, lines)
    return reduced_widths(atmosphere, composition, lines, vmic, abundances, departures=departures)


def solved_engine() -> Engine:
    """An engine of the treatment "nlte" for atmospheres that are no nodes."""
    from specsolve import __version__

    return Engine(solved_widths, {"name": "nlte, solved at the point", "specsolve": __version__})


ENGINES = {"lte": lte_engine, "nlte": nlte_engine}
"""Engine of each treatment that can be built."""


def codes_of_nodes(
    engine: Engine, atmospheres: Sequence[Any], lines: LineList, vmic: np.ndarray, dA: np.ndarray
) -> np.ndarray:
    """Codes of all lines at some nodes, uint16 of shape (n_nodes, n_lines, n_vmic, n_dA); the task of a worker.

    Raises
    ------
    SpecsolveError
        Naming the node at which the engine failed.
    """
    codes = []
    for atmosphere in atmospheres:
        try:
            codes.append(encode(engine.widths(atmosphere, lines, vmic, dA)))
        except (ValueError, ArithmeticError) as error:
            raise SpecsolveError(
                f"no widths at teff {atmosphere.teff:g}, logg {atmosphere.logg:g}, mh {atmosphere.mh:g}: {error}"
            ) from error
    return np.stack(codes)


def start_worker(parent: int) -> None:
    """Make a worker process end soon after its parent is killed."""

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(WATCH_S)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def estimated_seconds(n_lines: int, n_nodes: int, n_widths: int, workers: int = 1) -> float:
    """Time to compute a grid [s].

    Parameters
    ----------
    n_lines, n_nodes : int
        New lines, and nodes that have atmospheres.
    n_widths : int
        Widths a line and node, n_vmic n_dA.

    Examples
    --------
    >>> round(estimated_seconds(37, 1080, 64))
    64
    """
    return n_nodes * (SECONDS_PER_NODE + n_lines * n_widths * SECONDS_PER_WIDTH) / workers if n_lines else 0.0
