"""Make the default line list, with what spoils each line in the Sun, a K dwarf and a cool giant.

``python -m specsolve.grid.default_lines REFERENCE OUTPUT.ecsv`` (about 15 s): the choice is that of
`lines.default_build`; neighbours come from the Atomic Line List (elements to uranium, two stages, 4300-8100
Angstrom), strengths from our own atmospheres at solar composition. Copy the result to ``linelists_demo/`` and
``specsolve/data/lines/``.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.blanketing_convert import read_atomic_line_list
from specsolve.atmosphere.structure import solve_structure
from specsolve.constants import SOLAR_IRON, SOLAR_LOGG, SOLAR_TEFF
from specsolve.formation import reduced_widths
from specsolve.formation.spoilers import neighbours_in_words, ranges_in_words, strength_in_words, strengths
from specsolve.lines import read_line_list, vacuum_to_air
from specsolve.lines.default_build import build
from specsolve.matter.composition import composition_for
from specsolve.matter.equation_of_state import equilibrium

STARS = {
    "sun": (SOLAR_TEFF, SOLAR_LOGG, 1.0),
    "k_dwarf": (4500.0, 4.6, 0.8),
    "cool_giant": (4500.0, 2.0, 1.5),
}
"""teff [K], logg, vmic [km/s]; solar metallicity, where lines crowd most."""
FORMATION_LOG_TAU = -1.0  # log tau_5000 of the layer at which strengths are compared


def spoiled(lines, neighbours, teff: float, logg: float, vmic: float, kind: str) -> list[str]:
    """What spoils each line in one star, as text."""
    composition = composition_for(0.0)
    model = solve_structure(teff, logg, composition, load_blanketing(0.0))
    if model.status != "converged":
        raise RuntimeError(f"{kind}: {model.reason}")
    at = np.argmin(np.abs(model.log_tau - FORMATION_LOG_TAU))
    gas = equilibrium(model.temperature[at : at + 1], model.gas_pressure[at : at + 1], composition)
    own, other = strengths(
        gas,
        lines,
        SOLAR_IRON,
        neighbours["ion"],
        neighbours["wavelength"],
        neighbours["e_low"],
        neighbours["log_gf"],
    )
    near = neighbours_in_words(
        lines, own, neighbours["ion"], vacuum_to_air(neighbours["wavelength"]), neighbours["e_low"], other
    )
    widths = reduced_widths(model, composition, lines, [vmic], [SOLAR_IRON])[:, 0, 0]
    return [
        ", ".join(words for words in (strength_in_words(width), neighbour, ranges_in_words(wave, kind)) if words)
        for width, neighbour, wave in zip(widths, near, lines.wavelength_air, strict=True)
    ]


def main(reference: Path, output: Path) -> str:
    """Write the list; returns one line about it."""
    from astropy.table import Column, Table

    told = build(reference, output)
    lines = read_line_list(output)
    table = Table.read(output, format="ascii.ecsv")
    path = Path(reference) / "atomic" / "line_list" / "all_elements_I_II_E1_4300_8100A.csv.gz"
    neighbours = read_atomic_line_list(path)
    order = np.lexsort((table["wavelength_air"], table["ion"]))
    for kind, (teff, logg, vmic) in STARS.items():
        words = np.empty(len(table), object)
        words[order] = spoiled(lines, neighbours, teff, logg, vmic, kind)
        description = f"in a star of {teff:.0f} K, log g {logg:.2f}, solar composition, xi {vmic:.1f} km/s"
        table[f"spoiled_{kind}"] = Column(words.astype(str), description=description)
    table.meta["spoiled"] = (
        "strength at solar iron; neighbours by opacity at log tau_5000 = -1 within a Gaussian of 0.06 Angstrom, atoms"
        " only; bands of molecules, of the Earth's air and hydrogen wings by wavelength (common practice, no source)"
    )
    table.write(output, format="ascii.ecsv", overwrite=True)
    return told


if __name__ == "__main__":
    sys.stdout.write(main(Path(sys.argv[1]), Path(sys.argv[2])) + "\n")
