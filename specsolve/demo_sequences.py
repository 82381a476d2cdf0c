"""An invented family of sequences through the invented cluster Marsk 7, for the demonstration of an age fit.

Not a theory of stars: the curve of age 2.5 Gyr and [Fe/H] -0.12 goes through the invented members; another age or
metallicity moves it by simple formulas that have the signs of real sequences.

``python -m specsolve.demo_sequences --output demo_data`` writes ``sequences.ecsv``.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.demo import CLUSTER_FEH, INVENTED, MEMBERS
from specsolve.report.tables import write_table

if TYPE_CHECKING:
    from astropy.table import Table

TRUE_AGE = 2.5
"""Gyr; invented."""
TURN_OFF = 5.2  # phase of the hottest point
AGES = np.round(np.geomspace(1.25, 5.0, 17), 4)  # Gyr
METALLICITIES = np.round(np.arange(-0.36, 0.121, 0.08), 3)
N_PHASES = 56
# Per unit of ln(age): cooling at the turn-off [K], its width in phase, and fading of the branches [dex in log g].
TURN_OFF_COOLING, TURN_OFF_WIDTH = -1150.0, 2.6
GIANT_COOLING, GIANT_FROM = -160.0, 8.0
TURN_OFF_LOGG, SUBGIANT_LOGG = -0.06, 0.34
# Per dex of [Fe/H]: a metal-rich sequence is cooler.
TEFF_PER_DEX, LOGG_PER_DEX = -420.0, -0.08


def sequence(age: float, feh: float, phase: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Teff [K] and log g [cgs] of the invented family.

    Parameters
    ----------
    age : float
        [Gyr]
    feh : float
        [dex]
    phase : ndarray
        0 (lowest dwarf) to 11 (highest giant).

    Examples
    --------
    >>> teff, logg = sequence(2.5, -0.12, np.array([0.0, 11.0]))
    >>> teff.tolist()
    [5110.0, 4640.0]
    """
    from scipy.interpolate import PchipInterpolator

    order = sorted(MEMBERS, key=lambda member: -member.logg)
    nodes = np.arange(len(order), dtype=float)
    along = np.asarray(phase, float)
    step, metals = np.log(age / TRUE_AGE), feh - CLUSTER_FEH
    bump = np.exp(-0.5 * ((along - TURN_OFF) / TURN_OFF_WIDTH) ** 2)
    giant = 1.0 / (1.0 + np.exp(-(along - GIANT_FROM) / 0.7))
    subgiant = np.exp(-0.5 * ((along - 7.2) / 1.2) ** 2)
    teff = PchipInterpolator(nodes, [member.teff for member in order])(along)
    logg = PchipInterpolator(nodes, [member.logg for member in order])(along)
    teff = teff + step * (TURN_OFF_COOLING * bump + GIANT_COOLING * giant) + TEFF_PER_DEX * metals
    logg = logg + step * (TURN_OFF_LOGG * bump + SUBGIANT_LOGG * subgiant) + LOGG_PER_DEX * metals
    return teff, logg


def table() -> Table:
    """The family as a table: age, feh, phase, teff, logg."""
    from astropy.table import Column, Table

    phase = np.round(np.linspace(0.0, len(MEMBERS) - 1.0, N_PHASES), 2)
    rows = {name: [] for name in ("age", "feh", "phase", "teff", "logg")}
    for age in AGES:
        for feh in METALLICITIES:
            teff, logg = sequence(age, feh, phase)
            rows["age"] += [age] * N_PHASES
            rows["feh"] += [feh] * N_PHASES
            rows["phase"] += list(phase)
            rows["teff"] += list(np.round(teff, 1))
            rows["logg"] += list(np.round(logg, 4))
    units = {"age": "Gyr", "feh": "dex", "phase": None, "teff": "K", "logg": "dex"}
    words = {
        "age": "age (invented)", "feh": "[Fe/H]", "phase": "place along the curve", "teff": "effective temperature",
        "logg": "log10 of the surface gravity in cm/s2",
    }  # fmt: skip
    made = Table({name: Column(values, unit=units[name], description=words[name]) for name, values in rows.items()})
    made.meta = {"comment": INVENTED, "made_by": "python -m specsolve.demo_sequences", "true_age": TRUE_AGE}
    return made


def main(arguments: list[str] | None = None) -> None:
    """``python -m specsolve.demo_sequences --output FOLDER``."""
    parser = argparse.ArgumentParser(prog="python -m specsolve.demo_sequences", description=INVENTED)
    parser.add_argument("--output", default="demo_data", help="existing folder for sequences.ecsv")
    options = parser.parse_args(arguments)
    print(write_table(table(), Path(options.output) / "sequences.ecsv"), file=sys.stderr)


if __name__ == "__main__":
    main()
