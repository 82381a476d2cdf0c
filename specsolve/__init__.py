"""specsolve: Teff, log g, [Fe/H] and microturbulence from equivalent widths of iron lines.

Names load when they are first used, so that ``import specsolve`` stays under 0.3 s.

Examples
--------
>>> import specsolve
>>> solutions = specsolve.solve("widths.ecsv")        # doctest: +SKIP
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "solve": "specsolve.balance.solve",
    "solve_many": "specsolve.balance.batch",
    "Solution": "specsolve.balance.solution",
    "Problem": "specsolve.balance.problem",
    "Outside": "specsolve.balance.outside",
    "Star": "specsolve.balance.star",
    "LineList": "specsolve.lines",
    "AtmosphereStore": "specsolve.atmosphere.store",
    "ResponseGrid": "specsolve.grid.store",
    "crosscheck": "specsolve.uses.crosscheck",
    "cluster": "specsolve.uses.cluster",
    "rehearse": "specsolve.uses.rehearsal",
    "SpecsolveError": "specsolve.errors",
}

__all__ = ["__version__", *sorted(_HOMES)]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'specsolve' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    return __all__
