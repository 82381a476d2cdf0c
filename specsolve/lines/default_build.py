"""Choose and grade the default list of Fe I and Fe II lines.

``python -m specsolve.lines.default_build REFERENCE OUTPUT.ecsv`` reads, below the folder REFERENCE,
``atomic/iron_lines.ecsv`` (NIST transition probabilities with quality marks), ``atomic/nist/`` (further NIST values)
and ``stars/*_lines.ecsv`` (which lines observers measure), and writes the list with source, grade, error of log gf,
damping and what spoils each line.

Choice: all lines of the near-solar differential set (Bedell et al. 2017, ApJ 839, 94), then the quality-1 lines,
Fe II first, then by grade and by the number of published tables of widths that use the line, up to 210 lines.

log gf. Fe I: NIST; where NIST has nothing of class C or better, the value of the differential set. Fe II: Melendez &
Barbuy 2009, A&A 497, 611, whose values agree line by line better than those of NIST (standard deviation of solar
abundances 0.05 against 0.12 dex, see the tests); the NIST value is the alternative.

Grades: 1 laboratory value of the best sources; 2 laboratory value of lower accuracy; 3 value of class D or worse, or a
neighbour with more than 5 % of the strength in the Sun; 4 no laboratory value: for differential work.
"""

from __future__ import annotations

import csv
import gzip
import sys
from pathlib import Path

import numpy as np

from .identify import identify
from .line_list import LineList
from .transitions_build import OSCILLATOR_CM2_S
from .wavelengths import vacuum_to_air

MAXIMUM_LINES = 210
LETTER_ERROR = {"A": 0.02, "B+": 0.03, "B": 0.04, "C+": 0.07, "C": 0.10, "D+": 0.15, "D": 0.18, "E": 0.25}
"""log10(1 + x) of the accuracy classes x of transition probabilities: 3, 7, 10, 18, 25, 40, 50, > 50 %; NIST ASD."""
MOST_BLENDED = 0.05  # strength of neighbours over own strength, in the Sun
NO_LABORATORY_ERROR = 0.15  # dex; common practice, no source
GOOD_LETTERS = ("A", "B+", "B", "C+", "C")

SOURCES = {
    ("Fe I", 1): ("NIST ASD: Oxford and Hannover laboratory values", 0.03),
    ("Fe I", 2): ("NIST ASD: O'Brian et al. 1991, JOSA B 8, 1185", 0.07),
    ("Fe I", 3): ("NIST ASD: May et al. 1974, A&AS 18, 405, and others", 0.12),
    ("Fe II", 1): ("NIST ASD: Schnabel, Schultz-Johanning & Kock 2004, A&A 414, 1169", 0.07),
    ("Fe II", 3): ("NIST ASD: other sources", 0.10),
}
"""Words and floor of the error [dex] by ion and tier of `iron_lines.ecsv`; the floors are the reproducibility of each
group against the others, common practice, no source."""
IONIZED_SOURCE = "Melendez & Barbuy 2009, A&A 497, 611"
IONIZED_ERROR = 0.06  # dex; from the scatter of solar Fe II abundances, 0.05 dex, measured here
DIFFERENTIAL_SOURCE = "Bedell et al. 2017, ApJ 839, 94 (compiled, partly astrophysical)"


def log_gf_of(ion: str, tier: int, letter: str) -> tuple[str, float]:
    """Source in words, and 1-sigma error of log gf [dex]: the larger of the source's floor and the NIST class."""
    words, floor = SOURCES[ion, tier]
    return f"{words} ({letter})", max(floor, LETTER_ERROR[letter])


def read_nist(path: Path):
    """(ion, air wavelength, lower energy, log gf, class) of the NIST lines with a transition probability."""
    rows = []
    with gzip.open(path, "rt", newline="") as handle:
        for row in csv.DictReader(handle):
            if row["sp_num"] not in ("1", "2") or not (row["Aki(s^-1)"] and row["ritz_wl_vac(nm)"] and row["g_k"]):
                continue
            wave = float(vacuum_to_air(10.0 * float(row["ritz_wl_vac(nm)"])))
            log_gf = np.log10(OSCILLATOR_CM2_S * wave**2 * float(row["g_k"]) * float(row["Aki(s^-1)"]))
            ion = "Fe I" if row["sp_num"] == "1" else "Fe II"
            rows.append((ion, wave, float(row["Ei(eV)"]), log_gf, row["Acc"].strip("'")))
    return rows


def collect(reference: Path) -> dict[str, dict]:
    """Every candidate line by transition name, with all that decides its place in the list."""
    from astropy.table import Table

    reference = Path(reference)
    graded = Table.read(reference / "atomic" / "iron_lines.ecsv", format="ascii.ecsv")
    graded_list = identify(
        LineList.from_arrays(graded["wavelength_air"], graded["ion"], graded["excitation_potential"], graded["log_gf"])
    )
    candidates: dict[str, dict] = {}
    for key, row in zip(graded_list.key.tolist(), graded, strict=True):
        words, error = log_gf_of(row["ion"], int(row["gf_tier"]), row["nist_grade"])
        alternative = row["log_gf_alternative"]
        good = row["nist_grade"] in GOOD_LETTERS
        log_gf = float(row["log_gf"])
        other = np.nan if alternative is np.ma.masked else float(alternative)
        if np.isfinite(other):  # Fe II on its default scale
            log_gf, other, words, error = other, log_gf, IONIZED_SOURCE, IONIZED_ERROR
        candidates[key] = {
            "wavelength_air": float(row["wavelength_air"]),
            "ion": row["ion"],
            "excitation_potential": float(row["excitation_potential"]),
            "log_gf": log_gf,
            "log_gf_error": error,
            "log_gf_alternative": other,
            "nist_class": row["nist_grade"],
            "source": words,
            "quality": int(row["quality"]),
            "grade": 3
            if row["blend_ratio_sun"] > MOST_BLENDED
            else 1
            if np.isfinite(other) or (row["gf_tier"] == 1 and good)
            else 2
            if good
            else 3,
            "tables": set(),
            "differential": False,
        }
    nist = read_nist(reference / "atomic" / "nist" / "fe_lines_200_1000nm.csv.gz")
    for path in sorted((reference / "stars").glob("*_lines.ecsv")):
        table = Table.read(path, format="ascii.ecsv")
        inside = (table["wavelength_air"] > 3500.0) & (table["wavelength_air"] < 10000.0)
        _, first = np.unique(
            [
                f"{i}{w:.2f}{e:.1f}"
                for i, w, e in table["ion", "wavelength_air", "excitation_potential"][inside].iterrows()
            ],
            return_index=True,
        )
        rows = table[inside][first]
        named = identify(
            LineList.from_arrays(rows["wavelength_air"], rows["ion"], rows["excitation_potential"], rows["log_gf"])
        )
        differential = path.name.startswith("dwarfs_differential")
        for key, row in zip(named.key.tolist(), rows, strict=True):
            if differential and key not in candidates:
                candidates[key] = from_star_table(row, nist)
            if key not in candidates:
                continue
            known = candidates[key]
            known["tables"].add(path.name)
            known["differential"] |= differential
            if differential and known["ion"] == "Fe I" and known["nist_class"] not in GOOD_LETTERS:
                known |= {"log_gf": float(row["log_gf"]), "source": DIFFERENTIAL_SOURCE, "nist_class": ""}
                known |= {"log_gf_error": NO_LABORATORY_ERROR, "grade": 4}
    return candidates


def from_star_table(row, nist) -> dict:
    """A candidate that `iron_lines.ecsv` lacks: a NIST value of a good class, else the published one."""
    ion, wave, energy = row["ion"], float(row["wavelength_air"]), float(row["excitation_potential"])
    close = [n for n in nist if n[0] == ion and abs(n[1] - wave) < 0.05 and abs(n[2] - energy) < 0.02]
    best = max(close, key=lambda n: n[3], default=None)
    laboratory = best is not None and best[4] in GOOD_LETTERS
    return {
        "wavelength_air": wave,
        "ion": ion,
        "excitation_potential": best[2] if laboratory else energy,
        "log_gf": round(best[3], 3) if laboratory else float(row["log_gf"]),
        "log_gf_error": max(0.07, LETTER_ERROR[best[4]]) if laboratory else NO_LABORATORY_ERROR,
        "log_gf_alternative": np.nan,
        "nist_class": best[4] if laboratory else "",
        "source": f"NIST ASD ({best[4]})" if laboratory else DIFFERENTIAL_SOURCE,
        "quality": 0,
        "grade": 2 if laboratory else 4,
        "tables": set(),
        "differential": True,
    }


def choose(candidates: dict[str, dict]) -> list[dict]:
    """The differential set and the best quality-1 lines, at most `MAXIMUM_LINES`, in canonical order."""
    chosen = {key: c for key, c in candidates.items() if c["differential"]}
    others = sorted(
        (key for key, c in candidates.items() if c["quality"] == 1 and not c["differential"]),
        key=lambda key: (
            candidates[key]["ion"] != "Fe II",
            candidates[key]["grade"] - 0.5 * len(candidates[key]["tables"]),
            candidates[key]["log_gf_error"],
            key,
        ),
    )
    for key in others[: MAXIMUM_LINES - len(chosen)]:
        chosen[key] = candidates[key]
    return sorted(chosen.values(), key=lambda c: (c["ion"], c["wavelength_air"]))


def build(reference: Path, output: Path) -> str:
    """Write the default list; returns one line about it."""
    from astropy import units
    from astropy.table import Column, Table

    chosen = choose(collect(reference))

    def column(name):
        return [c[name] for c in chosen]

    lines = identify(
        LineList.from_arrays(*(column(name) for name in ("wavelength_air", "ion", "excitation_potential", "log_gf")))
    )
    table = Table()
    table["wavelength_air"] = Column(np.round(lines.wavelength_air, 3), unit=units.Angstrom)
    table["ion"] = lines.ion
    table["excitation_potential"] = Column(np.round(lines.excitation_potential, 4), unit=units.eV)
    for name in ("log_gf", "log_gf_error", "log_gf_alternative"):
        table[name] = Column(np.round(column(name), 3), description=DESCRIPTIONS[name])
    for name in ("grade", "nist_class"):
        table[name] = Column(column(name), description=DESCRIPTIONS[name])
    for name, digits in (("broadening_sigma", 0), ("broadening_alpha", 3), ("log_gamma_rad", 2)):
        table[name] = Column(np.round(getattr(lines, name), digits), description=DESCRIPTIONS[name])
    table["lower_term"], table["upper_term"] = lines.lower_term, lines.upper_term
    table["source"] = column("source")
    table["published_tables"] = Column(
        [len(c["tables"]) for c in chosen], description="how many of eight published sets of stars use the line"
    )
    table.meta["description"] = "Default Fe I and Fe II lines of specsolve, graded"
    table.meta["sources"] = SOURCE_WORDS
    table.write(output, format="ascii.ecsv", overwrite=True)
    grades = {g: int(np.sum(table["grade"] == g)) for g in (1, 2, 3, 4)}
    return f"{len(table)} lines, {int(np.sum(table['ion'] == 'Fe II'))} of Fe II; by grade {grades}"


DESCRIPTIONS = {
    "log_gf": "default scale [dex]",
    "log_gf_error": "1-sigma, from the source of the value [dex]",
    "log_gf_alternative": "Fe II: value of NIST ASD [dex]",
    "grade": "1 best laboratory, 2 laboratory, 3 low accuracy, 4 differential work only",
    "nist_class": "accuracy class of the NIST value, where there is one",
    "broadening_sigma": "hydrogen cross-section at 10 km/s [a0^2]",
    "broadening_alpha": "velocity exponent of the cross-section",
    "log_gamma_rad": "log10 radiative full width [rad/s]",
}
SOURCE_WORDS = [
    "wavelengths, energies: NIST ASD",
    "hydrogen broadening: Barklem, Piskunov & O'Mara 2000, A&AS 142, 467; Barklem & Aspelund-Johansson 2005, "
    "A&A 435, 373; else the tables of Anstee & O'Mara 1995, Barklem & O'Mara 1997, Barklem, O'Mara & Ross 1998, "
    "or the mean of the multiplet",
    "radiative damping: summed transition probabilities of both levels, Atomic Line List v3 (van Hoof 2018, "
    "Galaxies 6, 63)",
]

if __name__ == "__main__":
    sys.stdout.write(build(Path(sys.argv[1]), Path(sys.argv[2])) + "\n")
