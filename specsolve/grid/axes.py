"""Axes of a response grid: names, units, default nodes, and subsets written on a command line."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.errors import InputError, UsageError

NODE_AXES = ("teff", "logg", "mh")
"""Axes that need one model atmosphere per node."""

LINE_AXES = ("vmic", "dA")
"""Axes along which one atmosphere serves all nodes; dA is A(Fe) - SOLAR_IRON - mh."""

UNITS = {"teff": "K", "logg": "dex(cgs)", "mh": "dex", "vmic": "km/s", "dA": "dex"}

DEFAULT_VMIC = tuple(0.5 * i for i in range(8))
"""Microturbulence nodes, 0 to 3.5 km/s."""

DEFAULT_DA = tuple(round(-1.4 + 0.4 * i, 1) for i in range(8))
"""Nodes in A(Fe) - SOLAR_IRON - mh, -1.4 to +1.4 dex."""

SAME_NODE = 1e-6
"""Two node values that differ by less than this (in the unit of the axis) are the same node."""


@dataclass(frozen=True)
class Axis:
    """One axis of a grid.

    Attributes
    ----------
    name, unit : str
    values : ndarray, shape (n,)
        Strictly increasing node values.

    Examples
    --------
    >>> Axis("logg", "dex(cgs)", [4.0, 4.5, 5.0]).index_of(4.5)
    1
    """

    name: str
    unit: str
    values: np.ndarray

    def __post_init__(self):
        values = np.array(self.values, dtype=np.float64)
        if values.ndim != 1 or values.size == 0 or not np.all(np.isfinite(values)) or np.any(np.diff(values) <= 0):
            raise InputError(
                f"axis {self.name}: the nodes must be finite and strictly increasing, got {values.tolist()}"
            )
        values.flags.writeable = False
        object.__setattr__(self, "values", values)

    def __len__(self) -> int:
        return self.values.size

    def index_of(self, value: float) -> int:
        """Index of the node at `value`, -1 if there is none."""
        nearest = int(np.argmin(np.abs(self.values - value)))
        return nearest if abs(self.values[nearest] - value) < SAME_NODE else -1


def parse_axis_subset(text: str) -> np.ndarray:
    """Node values from ``START:STOP:STEP`` (both ends included), ``A,B,C`` or a single number.

    Raises
    ------
    UsageError
        If the text is none of these, or STOP is not START plus a whole number of steps.

    Examples
    --------
    >>> parse_axis_subset("-1:0:0.5").tolist()
    [-1.0, -0.5, 0.0]
    >>> parse_axis_subset("2.5").tolist()
    [2.5]
    """
    question = f"'{text}' is not an axis subset: write START:STOP:STEP (4500:6000:250), A,B,C or one number"
    is_range = ":" in text
    try:
        numbers = [float(part) for part in text.split(":" if is_range else ",")]
    except ValueError as error:
        raise UsageError(question) from error
    if not np.all(np.isfinite(numbers)) or (is_range and len(numbers) != 3):
        raise UsageError(question)
    if not is_range:
        return np.unique(numbers)
    start, stop, step = numbers
    count = (stop - start) / step if step > 0 else -1.0
    if count < 0 or abs(count - round(count)) > SAME_NODE:
        raise UsageError(f"{question}; STOP must be START plus a whole number of positive steps")
    return start + step * np.arange(round(count) + 1)


def choose_nodes(name: str, available: np.ndarray, wanted: np.ndarray | None) -> np.ndarray:
    """The wanted nodes of an axis, all of which must be among the available ones; all of them if `wanted` is None.

    Raises
    ------
    InputError
        Naming the values that have no atmospheres.
    """
    if wanted is None:
        return np.asarray(available, dtype=np.float64)
    axis = Axis(name, UNITS.get(name, ""), available)
    index = [axis.index_of(value) for value in np.unique(wanted)]
    if -1 in index:
        absent = [float(v) for v, i in zip(np.unique(wanted), index, strict=True) if i < 0]
        raise InputError(f"{name}: no atmospheres at {absent}; there are {axis.values.tolist()}")
    return axis.values[index]
