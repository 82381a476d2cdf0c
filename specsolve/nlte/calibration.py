"""The factor S_H on the classical hydrogen collisions, calibrated once.

Named before the fit. Calibration: the ionization offset, mean A(Fe I) - mean A(Fe II), of HD 122563 at its fundamental
parameters, which no spectroscopy enters, and of the Sun; and what others have found with atoms of their own. Not used, but
kept for tests: the stars of Korn, Shi & Gehren 2003 (HD 103095, HD 19445, HD 84937, Procyon) and the metal-poor standards of
Sakari et al. 2018.

    python -m specsolve.nlte.calibration                        # prints the likelihood curve (one minute)
    python -m specsolve.nlte.calibration --widths REFERENCE     # remakes the table of widths of HD 122563

The microturbulence of each star and S_H is the one that leaves no slope of A(Fe I) with strength. Both offsets share the
error of the scales of gf of the two ions. 1D, plane-parallel: what convection does to giants is not in the errors.
"""

from __future__ import annotations

import argparse
import csv
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.atmosphere.structure import solve_structure
from specsolve.constants import SOLAR_IRON, SOLAR_LOGG, SOLAR_TEFF
from specsolve.formation.equivalent_width import reduced_widths
from specsolve.lines import LineList
from specsolve.lines.reading import default_line_list
from specsolve.matter.composition import composition_for
from specsolve.nlte.departures import DEPTHS, LineDepartures, at_depths
from specsolve.nlte.equilibrium import Departures, iterate, medium
from specsolve.nlte.line_levels import line_levels
from specsolve.nlte.packaged import packaged_atom
from specsolve.nlte.recipe import Recipe

DATA = Path(__file__).parent.parent / "data"
#: log10 S_H of the curve.
GRID = np.arange(-1.5, 1.01, 0.25)
#: Predicted or measured log10(W / lambda) of the lines used.
WEAKEST, STRONGEST = -6.2, -4.75
#: Error of the difference of the gf scales of Fe I and Fe II [dex]: half the rms difference of 0.1 between published
#: scales of Fe II (common practice, no source).
SCALE_ERROR = 0.05
#: S_H of other groups, each for its own atom: Korn, Shi & Gehren 2003, A&A 407, 691; Sitnova et al. 2015, ApJ 808, 148;
#: Mashonkina et al. 2011, A&A 528, A87 (the latter two from memory).
PUBLISHED = (3.0, 0.5, 0.1)
#: Weakly constrained if chi squared changes by less than this over a factor 3 on either side of the best.
WEAK_CHI2 = 4.0
VMIC_STEPS = np.array([-0.6, -0.3, 0.0, 0.3, 0.6])  # km/s about the guess of each star
#: Abundances relative to that of the atmosphere [dex]; in parts, because the profile points reach as far as the strongest
#: line of a call needs.
ABUNDANCE_PARTS = np.linspace(-1.0, 1.1, 22).reshape(2, 11)


#: Star tables with widths of HD 122563, and its name there; the header of the packaged table names the papers.
WIDTH_SOURCES = (("giants_lines.ecsv", "HD122563"), ("metal_poor_2014_lines.ecsv", "HD 122563"))
WIDTHS_HEADER = """# Equivalent widths of HD 122563 for lines of the default list, which supplies their log gf.
# Sources: Casey et al. 2014, ApJ 784, 19 (1); Roederer et al. 2014, AJ 147, 136 (2).
# Units: wavelength_air Angstrom, excitation_potential eV, equivalent_width mA (0.001 Angstrom).
wavelength_air,ion,excitation_potential,equivalent_width,source
"""


@dataclass(frozen=True, kw_only=True)
class CalibrationStar:
    """A star whose parameters are known without spectroscopy.

    Attributes
    ----------
    name : str
    teff, teff_error, logg, logg_error : float
        [K], [dex cgs].
    mh : float
        [Fe/H] of its atmosphere [dex], that of the nearest opacity table.
    vmic : float
        First guess of the microturbulence [km/s].
    widths : str
        File of its equivalent widths below the packaged data.
    source : str
        Of the parameters.
    """

    name: str
    teff: float
    teff_error: float
    logg: float
    logg_error: float
    mh: float
    vmic: float
    widths: str
    source: str


STARS = (
    CalibrationStar(
        name="HD 122563",
        teff=4642.0,
        teff_error=35.0,
        logg=1.32,
        logg_error=0.03,
        mh=-2.5,
        vmic=2.1,
        widths="nlte/calibration_widths.csv",
        source="Soubiran et al. 2024, table 6",
    ),
    CalibrationStar(
        name="Sun",
        teff=SOLAR_TEFF,
        teff_error=0.0,
        logg=SOLAR_LOGG,
        logg_error=0.0,
        mh=0.0,
        vmic=1.0,
        widths="sun/solar_widths.csv",
        source="IAU 2015 resolution B3",
    ),
)


@dataclass(frozen=True, kw_only=True)
class Curve:
    """Offsets and chi squared against log10 S_H.

    Attributes
    ----------
    log_factor : ndarray, shape (n,)
    offsets : ndarray, shape (n_stars, n)
        mean A(Fe I) - mean A(Fe II) [dex].
    lte : ndarray, shape (n_stars,)
        The same in LTE.
    errors : ndarray, shape (n_stars,)
        Of the offsets, without the common error of the gf scales [dex].
    chi2_stars, chi2 : ndarray, shape (n,)
        Of the two stars; with the published results.
    """

    log_factor: np.ndarray
    offsets: np.ndarray
    lte: np.ndarray
    errors: np.ndarray
    chi2_stars: np.ndarray
    chi2: np.ndarray

    @property
    def best(self) -> float:
        """log10 S_H of the least chi squared, from a parabola through the three lowest points."""
        i = int(np.clip(np.argmin(self.chi2), 1, self.chi2.size - 2))
        a, b, _ = np.polyfit(self.log_factor[i - 1 : i + 2], self.chi2[i - 1 : i + 2], 2)
        return float(np.clip(-0.5 * b / a, self.log_factor[i - 1], self.log_factor[i + 1]))

    @property
    def contrast(self) -> float:
        """Smaller rise of chi squared over a factor 3 in S_H, to either side of the best."""
        sides = self.best + np.array([-1.0, 1.0]) * np.log10(3.0)
        values = np.interp(sides, self.log_factor, self.chi2)
        return float(values.min() - self.chi2.min())


def star_lines(star: CalibrationStar) -> tuple[LineList, np.ndarray]:
    """Lines of the default list that are measured in a star, and log10(W / lambda); a line measured twice: the mean."""
    text = (DATA / star.widths).read_text(encoding="ascii").splitlines()
    table = list(csv.DictReader(line for line in text if not line.startswith("#")))
    lines = default_line_list()
    measured: dict[int, list[float]] = {}
    for row in table:
        same = np.abs(lines.wavelength_air - float(row["wavelength_air"])) < 0.05
        same &= (lines.ion == row["ion"]) & (
            np.abs(lines.excitation_potential - float(row["excitation_potential"])) < 0.02
        )
        for i in np.flatnonzero(same):
            measured.setdefault(int(i), []).append(float(row["equivalent_width"]))
    index = np.array(sorted(measured))
    strength = np.log10([np.mean(measured[i]) * 1e-3 / lines.wavelength_air[i] for i in index])
    used = (strength > WEAKEST) & (strength < STRONGEST)
    return lines.select(index[used]), strength[used]


def offset(
    star: CalibrationStar,
    model: Atmosphere,
    lines: LineList,
    strength: np.ndarray,
    departures: LineDepartures | None = None,
) -> tuple[float, float]:
    """Ionization offset and the error that the scatter of the lines gives it [dex], at zero strength slope."""
    parts, vmic = SOLAR_IRON + star.mh + ABUNDANCE_PARTS, star.vmic + VMIC_STEPS
    composition, grid = composition_for(star.mh), parts.ravel()
    each = [reduced_widths(model, composition, lines, vmic, part, departures=departures) for part in parts]
    widths = np.concatenate(each, axis=2)
    widths = np.where(np.isfinite(widths), widths, -9.0)  # too weak to be computed
    abundances = np.array(
        [[np.interp(w, row, grid, np.nan, np.nan) for row in rows] for w, rows in zip(strength, widths, strict=True)]
    )
    neutral, good = lines.ion == "Fe I", np.all(np.isfinite(abundances), axis=1)
    first, second = abundances[neutral & good], abundances[~neutral & good]
    slopes = np.array([np.polyfit(strength[neutral & good], column, 1)[0] for column in first.T])
    if not slopes[0] > 0.0 > slopes[-1]:
        raise RuntimeError(f"{star.name}: no microturbulence near {star.vmic:g} km/s leaves no strength slope")
    best = np.interp(0.0, -slopes, vmic)
    one, two = (np.array([np.interp(best, vmic, row) for row in rows]) for rows in (first, second))
    error = np.hypot(one.std() / np.sqrt(one.size), two.std() / np.sqrt(two.size))
    return float(one.mean() - two.mean()), float(error)


def star_offsets(star: CalibrationStar, log_factors: Sequence[float]) -> tuple[np.ndarray, float, float]:
    """Offsets at each S_H, in LTE, and their error from lines and parameters [dex]."""
    lines, strength = star_lines(star)
    atom, levels = packaged_atom(), line_levels(lines)
    composition, blanketing = composition_for(star.mh), load_blanketing(star.mh)

    def converged(teff: float, logg: float, start: Atmosphere) -> Atmosphere:
        found = solve_structure(teff, logg, composition, blanketing, start=start)
        if found.status == "failed":
            raise RuntimeError(f"{star.name}: {found.reason}")
        return found

    store = AtmosphereStore.packaged()
    nodes = [node for node in store.nodes() if node[2] == star.mh and store.has(*node)]
    near = min(nodes, key=lambda node: abs(node[0] - star.teff) / 250.0 + abs(node[1] - star.logg) / 0.5)
    model = converged(star.teff, star.logg, store.get(*near))
    lte, error = offset(star, model, lines, strength)
    variance = error**2
    for d_teff, d_logg in ((star.teff_error, 0.0), (0.0, star.logg_error)):
        if d_teff or d_logg:
            moved = converged(star.teff + d_teff, star.logg + d_logg, model)
            variance += (offset(star, moved, lines, strength)[0] - lte) ** 2
    surroundings = medium(model, composition, atom)
    found: Departures | None = None
    offsets = []
    for value in log_factors:
        found = iterate(surroundings, atom, Recipe(hydrogen_factor=10.0**value), found)
        if not found.converged:
            raise RuntimeError(f"{star.name}, S_H = {10.0**value:.3g}: {found.reason}")
        b = LineDepartures(at_depths(found.log_b, found.log_tau), np.array(DEPTHS), levels.lower, levels.upper)
        offsets.append(offset(star, model, lines, strength, b)[0])
    return np.array(offsets), lte, float(np.sqrt(variance))


def likelihood_curve(log_factors: np.ndarray = GRID) -> Curve:
    """Compute the curve; see the module."""
    results = [star_offsets(star, log_factors) for star in STARS]
    offsets, lte = np.array([r[0] for r in results]), np.array([r[1] for r in results])
    errors = np.array([r[2] for r in results])
    covariance = np.diag(errors**2) + SCALE_ERROR**2
    chi2_stars = np.einsum("in,ij,jn->n", offsets, np.linalg.inv(covariance), offsets)
    published = np.log10(PUBLISHED)
    return Curve(
        log_factor=np.asarray(log_factors),
        offsets=offsets,
        lte=lte,
        errors=errors,
        chi2_stars=chi2_stars,
        chi2=chi2_stars + ((log_factors - published.mean()) / published.std(ddof=1)) ** 2,
    )


def describe(curve: Curve) -> str:
    """The curve as text, with the verdict."""
    rows = ["star        LTE offset   error   lines of the default list, 1D"]
    rows += [
        f"{star.name:10s} {lte:+10.3f} {error:8.3f}   {star.source}"
        for star, lte, error in zip(STARS, curve.lte, curve.errors, strict=True)
    ]
    rows.append(
        "   S_H   " + "   ".join(star.name for star in STARS) + "   chi2 of stars   chi2 with published results"
    )
    for i, value in enumerate(curve.log_factor):
        offsets = "  ".join(f"{o:+9.3f}" for o in curve.offsets[:, i])
        rows.append(f"{10.0**value:7.3f} {offsets} {curve.chi2_stars[i]:12.2f} {curve.chi2[i]:14.2f}")
    weak = "weakly constrained: " if curve.contrast < WEAK_CHI2 else ""
    rows.append(
        f"best S_H {10.0**curve.best:.2f}; {weak}chi squared rises by {curve.contrast:.2f} over a factor 3; "
        f"the value in use is {Recipe().hydrogen_factor:g}"
    )
    return "\n".join(rows)


def widths_table(reference: Path) -> str:
    """Text of the packaged table of widths of HD 122563, from the star tables below `reference`."""
    from astropy.table import Table

    lines = default_line_list()
    rows = []
    for number, (file, name) in enumerate(WIDTH_SOURCES, start=1):
        table = Table.read(reference / "stars" / file, format="ascii.ecsv")
        for row in table[table["star"] == name]:
            same = (lines.ion == row["ion"]) & (np.abs(lines.wavelength_air - row["wavelength_air"]) < 0.05)
            same &= np.abs(lines.excitation_potential - row["excitation_potential"]) < 0.02
            for i in np.flatnonzero(same)[:1]:
                rows.append(
                    (
                        lines.wavelength_air[i],
                        row["ion"],
                        lines.excitation_potential[i],
                        row["equivalent_width"],
                        number,
                    )
                )
    rows.sort()
    return WIDTHS_HEADER + "".join("{:.3f},{},{:.4f},{:.1f},{}\n".format(*row) for row in rows)


def main(arguments: list[str] | None = None) -> None:
    """Print the likelihood curve, or remake the table of widths."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--widths", type=Path, metavar="REFERENCE", help="remake the table of widths instead")
    options = parser.parse_args(arguments)
    if options.widths is not None:
        (DATA / STARS[0].widths).write_text(widths_table(options.widths), encoding="ascii")
        return
    sys.stdout.write(describe(likelihood_curve()) + "\n")


if __name__ == "__main__":
    main()
