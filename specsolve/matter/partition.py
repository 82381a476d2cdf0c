"""Partition functions and ionization energies of atoms and ions, from one packaged table.

Source: Barklem & Collet (2016, A&A 588, A96) to 10 000 K; above, sums over NIST levels up to hydrogenic n = 8 joined
continuously (see `specsolve.matter.partition_build`). Ionization energies: NIST Atomic Spectra Database.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import NamedTuple

import numpy as np

STAGES = ("I", "II", "III")
TABLE_PATH = Path(__file__).parent.parent / "data" / "matter" / "partition.npz"


class PartitionTable(NamedTuple):
    """The packaged table with the second derivatives of its cubic splines.

    Attributes
    ----------
    rows : dict
        Row of each species name ("Fe I", "H2").
    ionization_energy : ndarray, shape (n_species,)
        [eV]; `inf` for bare nuclei, `nan` for molecules.
    first, step : float
        First node and spacing in ln T [K].
    values, curvatures : ndarray, shape (n_species, n_nodes)
        ln U and its second derivative with respect to ln T.
    """

    rows: dict
    ionization_energy: np.ndarray
    first: float
    step: float
    values: np.ndarray
    curvatures: np.ndarray

    @property
    def lowest_temperature(self) -> float:
        return float(np.exp(self.first))

    @property
    def highest_temperature(self) -> float:
        return float(np.exp(self.first + self.step * (self.values.shape[1] - 1)))


@cache
def partition_table() -> PartitionTable:
    """The packaged table, read once a process."""
    with np.load(TABLE_PATH) as data:
        x, values = data["log_temperature"], data["log_partition"]
        rows = {str(name): row for row, name in enumerate(data["species"])}
        energies = data["ionization_energy_ev"]
    step = (x[-1] - x[0]) / (len(x) - 1)
    return PartitionTable(rows, energies, float(x[0]), step, values, _natural_curvatures(values, step))


def _natural_curvatures(values: np.ndarray, step: float) -> np.ndarray:
    """Second derivatives of the natural cubic spline through equidistant nodes, last axis."""
    n = values.shape[-1]
    matrix = np.eye(n)
    inner = np.arange(1, n - 1)
    matrix[inner, inner - 1] = matrix[inner, inner + 1] = 1.0
    matrix[inner, inner] = 4.0
    right = np.zeros_like(values)
    right[:, 1:-1] = 6.0 * np.diff(values, 2, axis=-1) / step**2
    return np.linalg.solve(matrix, right.T).T


def log_partition(rows: np.ndarray, temperature: np.ndarray) -> np.ndarray:
    """Logarithms of the partition functions of several species at once.

    Parameters
    ----------
    rows : ndarray of int, shape (n_species,)
        Rows of `partition_table()`.
    temperature : ndarray, shape (n,)
        [K], within the table (1500 to 33 000 K).

    Returns
    -------
    ndarray, shape (n_species, n)
        ln U; a cubic spline in ln T, so its second derivative is continuous.

    Raises
    ------
    ValueError
        If a temperature lies outside the table.
    """
    left, b, step = _place(temperature)
    a = 1.0 - b
    table = partition_table()
    values, curvatures = table.values[rows], table.curvatures[rows]
    return (
        a * values[:, left]
        + b * values[:, left + 1]
        + step**2 / 6.0 * ((a**3 - a) * curvatures[:, left] + (b**3 - b) * curvatures[:, left + 1])
    )


def log_partition_slope(rows: np.ndarray, temperature: np.ndarray) -> np.ndarray:
    """d ln U / d ln T of several species: their mean excitation energy in units of kT.

    Parameters and errors as in `log_partition`.

    Returns
    -------
    ndarray, shape (n_species, n)
    """
    left, b, step = _place(temperature)
    a = 1.0 - b
    table = partition_table()
    values, curvatures = table.values[rows], table.curvatures[rows]
    return (values[:, left + 1] - values[:, left]) / step + step / 6.0 * (
        (3.0 * b**2 - 1.0) * curvatures[:, left + 1] - (3.0 * a**2 - 1.0) * curvatures[:, left]
    )


def _place(temperature: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """Interval of the table in which each temperature lies, its fraction of it, and the spacing in ln T."""
    table = partition_table()
    temperature = np.atleast_1d(np.asarray(temperature, dtype=float))
    position = (np.log(temperature) - table.first) / table.step
    n_nodes = table.values.shape[1]
    if not np.all((position >= 0.0) & (position <= n_nodes - 1)):
        raise ValueError(
            f"temperatures {temperature.min():.1f} to {temperature.max():.1f} K leave the partition function table "
            f"({table.lowest_temperature:.0f} to {table.highest_temperature:.0f} K)"
        )
    left = np.minimum(position.astype(int), n_nodes - 2)
    return left, position - left, table.step


def species_row(species: str) -> int:
    """Row of a species ("Fe I", "H2") in the table; KeyError with the spelling expected if it is not there."""
    try:
        return partition_table().rows[species]
    except KeyError:
        raise KeyError(
            f"no partition function for {species!r}: written like 'Fe I', stages I to III, H to U, or 'H2', 'H2+'"
        ) from None


def partition_function(ion: str, temperature: np.ndarray | float) -> np.ndarray:
    """Partition function of an ion.

    Parameters
    ----------
    ion : str
        Element and stage, as "Fe I"; also "H2" and "H2+" (nuclear spin divided out, as in the source).
    temperature : float or ndarray, shape (n,)
        [K], 1500 to 33 000. The published table ends at 10 000 K; above it see the module's first lines.

    Returns
    -------
    ndarray
        U, of the shape of `temperature`.

    Examples
    --------
    >>> round(float(partition_function("Fe II", 5000.0)), 1)
    43.4
    """
    values = np.exp(log_partition(np.array([species_row(ion)]), np.ravel(temperature))[0])
    return values.reshape(np.shape(temperature))


def ionization_energy(ion: str) -> float:
    """Energy that takes one electron from the ground state of an ion.

    Parameters
    ----------
    ion : str
        Element and stage, as "Fe I".

    Returns
    -------
    float
        [eV], NIST Atomic Spectra Database; infinite for a bare nucleus.

    Examples
    --------
    >>> round(ionization_energy("Fe I"), 3)
    7.902
    """
    return float(partition_table().ionization_energy[species_row(ion)])
