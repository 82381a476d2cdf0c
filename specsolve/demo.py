"""The invented demo cluster: widths made by the full engine, noise and mishaps added.

Nothing here is real: the open cluster Marsk 7, its members and the spectrograph Tarn are invented.  Each member's
atmosphere is converged at its own parameters with opacity tables of the cluster's own metallicity; no response grid is
involved, so that solving the demo tests the grid too. Iron is out of LTE.

``python -m specsolve.demo --output demo_data`` writes ``cluster_widths.ecsv`` and ``cluster_truth.ecsv`` (about five
minutes, of which most is the opacity table).
"""

from __future__ import annotations

import argparse
import logging
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from specsolve.atmosphere.build import blanketing_for, converge_node
from specsolve.atmosphere.model import Atmosphere
from specsolve.constants import SOLAR_IRON
from specsolve.errors import ConvergenceError
from specsolve.formation.equivalent_width import reduced_widths
from specsolve.lines import LineList, default_line_list
from specsolve.matter.composition import composition_for
from specsolve.nlte.corrections import departures_of
from specsolve.report.tables import make_table, write_table

log = logging.getLogger(__name__)

CLUSTER = "Marsk 7"
CLUSTER_FEH = -0.12
SEED = 7
INVENTED = "Invented: the open cluster Marsk 7, its members and the spectrograph Tarn do not exist."


@dataclass(frozen=True)
class Spectrograph:
    """An invented spectrograph.

    Attributes
    ----------
    resolving_power : float
        lambda / FWHM.
    pixels_per_fwhm : float
    wavelength_range : (float, float)
        Air [Angstrom].
    gap : (float, float)
        Between its two detectors [Angstrom].
    continuum_error : float
        Standard deviation of the continuum level of one order, as a fraction.
    """

    resolving_power: float = 42000.0
    pixels_per_fwhm: float = 3.1
    wavelength_range: tuple[float, float] = (4780.0, 6800.0)
    gap: tuple[float, float] = (5740.0, 5790.0)
    continuum_error: float = 0.002

    def covers(self, wavelength_air: np.ndarray) -> np.ndarray:
        """Mask of the wavelengths [Angstrom] that fall on a detector."""
        low, high = self.wavelength_range
        in_gap = (wavelength_air > self.gap[0]) & (wavelength_air < self.gap[1])
        return (wavelength_air > low) & (wavelength_air < high) & ~in_gap

    def width_error(self, wavelength_air: np.ndarray, signal_to_noise: float) -> np.ndarray:
        """Photon error of an equivalent width [mA], 1.5 sqrt(FWHM pixel) / (S/N).

        Source: Cayrel 1988, IAU Symposium 132, 345 (from memory).
        """
        fwhm = wavelength_air / self.resolving_power
        return 1e3 * 1.5 * np.sqrt(fwhm * fwhm / self.pixels_per_fwhm) / signal_to_noise

    def continuum_width(self, wavelength_air: np.ndarray, widths: np.ndarray) -> np.ndarray:
        """Width error [mA] per unit of continuum error: a window of two FWHM and the line's own width."""
        return 1e3 * 2.0 * wavelength_air / self.resolving_power + widths


@dataclass(frozen=True)
class Member:
    """Truth of one invented star: teff [K], logg [cgs], vmic [km/s], S/N per pixel, number of spoiled lines."""

    name: str
    teff: float
    logg: float
    vmic: float
    signal_to_noise: float
    n_bad: int


TARN = Spectrograph()
MEMBERS = (
    Member(f"{CLUSTER} 101", 6390.0, 4.19, 1.47, 110.0, 2),
    Member(f"{CLUSTER} 104", 6145.0, 4.31, 1.29, 120.0, 1),
    Member(f"{CLUSTER} 112", 5880.0, 4.43, 1.11, 105.0, 2),
    Member(f"{CLUSTER} 115", 5625.0, 4.50, 0.97, 95.0, 0),
    Member(f"{CLUSTER} 123", 5365.0, 4.54, 0.86, 80.0, 3),
    Member(f"{CLUSTER} 127", 5110.0, 4.57, 0.79, 70.0, 1),
    Member(f"{CLUSTER} 201", 6215.0, 3.96, 1.52, 140.0, 1),
    Member(f"{CLUSTER} 206", 5730.0, 3.71, 1.26, 150.0, 2),
    Member(f"{CLUSTER} 211", 5175.0, 3.28, 1.17, 170.0, 1),
    Member(f"{CLUSTER} 302", 4945.0, 2.74, 1.38, 190.0, 2),
    Member(f"{CLUSTER} 305", 4885.0, 2.52, 1.43, 180.0, 1),
    Member(f"{CLUSTER} 309", 4640.0, 2.11, 1.56, 160.0, 2),
)
MISHAPS = (
    ("blend", 1.45, 0.0),
    ("cosmic-ray hit", 0.55, 0.0),
    ("misplaced continuum", 0.78, 0.0),
    ("telluric line", 1.9, 6270.0),
)
"""Kind, factor on the width, and wavelength above which it happens [Angstrom]; invented."""
UNKNOWN_LOG_GF_ERROR = 0.08  # dex, for lines whose source gives none
LEAST_SIGNIFICANCE = 5.0  # widths below this many errors are not reported
WIDEST_MA = 180.0  # wider lines were not measured, mA
MEASURED_FRACTION = 0.93  # of the visible lines


def atmospheres(members: tuple[Member, ...], feh: float) -> list[Atmosphere]:
    """Converge the atmosphere of each member at its own parameters.

    Raises
    ------
    ConvergenceError
        If one of them does not converge.
    """
    log.info("opacity table for [M/H] %+.2f", feh)
    blanketing = blanketing_for(feh)
    done: dict[tuple[float, float], Atmosphere] = {}
    for member in members:
        node = (member.teff, member.logg)
        model = converge_node(node, done, feh, blanketing, 1.0)
        if model.status != "converged":
            raise ConvergenceError(f"{member.name}: {model.reason}", error=model.flux_error, tolerance=1e-5)
        done[node] = model
        log.info("%s: atmosphere converged", member.name)
    return [done[member.teff, member.logg] for member in members]


def true_widths(member: Member, model: Atmosphere, lines: LineList, feh: float) -> np.ndarray:
    """Noise-free equivalent widths [mA] of one member, shape (n_lines,), with departures solved in its own atmosphere."""
    at = (np.array([member.vmic]), np.array([SOLAR_IRON + feh]))
    log_rw = reduced_widths(model, composition_for(feh), lines, *at, departures=departures_of(model, lines))[:, 0, 0]
    return 1e3 * lines.wavelength_air * 10.0**log_rw


def observe(
    member: Member, widths: np.ndarray, lines: LineList, spectrograph: Spectrograph, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray, np.ndarray, list[str]]:
    """What the invented spectrograph makes of a member.

    Returns
    -------
    index : ndarray of int
        Lines that were measured.
    measured, errors : ndarray
        Widths and their stated errors [mA] of those lines; the errors do not know of the mishaps.
    spoiled : list of str
        Mishaps in words.
    """
    photon = spectrograph.width_error(lines.wavelength_air, member.signal_to_noise)
    lever = spectrograph.continuum_width(lines.wavelength_air, widths)
    errors = np.hypot(photon, spectrograph.continuum_error * lever)
    measured = widths + rng.normal(0.0, 1.0, len(lines)) * errors
    seen = spectrograph.covers(lines.wavelength_air) & (rng.random(len(lines)) < MEASURED_FRACTION)
    seen &= (measured > LEAST_SIGNIFICANCE * errors) & (measured < WIDEST_MA)
    index = np.flatnonzero(seen)
    spoiled = []
    for i in rng.choice(index, size=member.n_bad, replace=False):
        possible = [item for item in MISHAPS if lines.wavelength_air[i] > item[2]]
        kind, factor, _ = possible[rng.integers(len(possible))]
        measured[i] *= factor
        spoiled.append(f"{lines.ion[i]} {lines.wavelength_air[i]:.2f} {kind}")
    return index, np.round(measured[index], 2), np.round(errors[index], 2), spoiled


def make(output: str | Path, *, seed: int = SEED, members: tuple[Member, ...] = MEMBERS) -> tuple[Path, Path]:
    """Make the demo cluster and write its two tables.

    Parameters
    ----------
    output : path-like
        Folder.
    seed : int
        Of the noise, the mishaps, and the errors of log gf, which are drawn once and shared by all members.
    members : tuple of Member
        Some of `MEMBERS`; what one of them gets does not depend on the others.

    Returns
    -------
    widths, truth : Path
    """
    rng = np.random.default_rng(seed)
    lines = default_line_list()
    gf_error = np.where(np.isnan(lines.log_gf_error), UNKNOWN_LOG_GF_ERROR, lines.log_gf_error)
    nature = lines.with_columns(log_gf=lines.log_gf + rng.normal(0.0, gf_error))
    columns: dict[str, list] = {name: [] for name in ("star", "wavelength_air", "ion", "excitation_potential")}
    columns |= {"equivalent_width": [], "equivalent_width_error": []}
    spoiled_by_star = []
    noise = dict(zip(MEMBERS, rng.spawn(len(MEMBERS)), strict=True))
    for member, model in zip(members, atmospheres(members, CLUSTER_FEH), strict=True):
        widths = true_widths(member, model, nature, CLUSTER_FEH)
        index, measured, errors, spoiled = observe(member, widths, lines, TARN, noise[member])
        columns["star"] += [member.name] * len(index)
        columns["wavelength_air"] += list(np.round(lines.wavelength_air[index], 3))
        columns["ion"] += list(lines.ion[index])
        columns["excitation_potential"] += list(np.round(lines.excitation_potential[index], 3))
        columns["equivalent_width"] += list(measured)
        columns["equivalent_width_error"] += list(errors)
        spoiled_by_star.append("; ".join(spoiled))
    source = {"made_by": "python -m specsolve.demo", "seed": seed}
    table = make_table("input", columns, source, subset=True)
    table.meta["comment"] = INVENTED
    truth = make_table(
        "truth",
        {
            "star": [member.name for member in members],
            "teff": [member.teff for member in members],
            "logg": [member.logg for member in members],
            "feh": [CLUSTER_FEH] * len(members),
            "vmic": [member.vmic for member in members],
            "signal_to_noise": [member.signal_to_noise for member in members],
            "bad_lines": spoiled_by_star,
        },
        source,
    )
    truth.meta["comment"] = INVENTED
    folder = Path(output)
    return write_table(table, folder / "cluster_widths.ecsv"), write_table(truth, folder / "cluster_truth.ecsv")


def main(arguments: list[str] | None = None) -> None:
    """``python -m specsolve.demo --output FOLDER``."""
    parser = argparse.ArgumentParser(prog="python -m specsolve.demo", description=INVENTED)
    parser.add_argument("--output", default="demo_data", help="existing folder for the two tables")
    parser.add_argument("--seed", type=int, default=SEED)
    options = parser.parse_args(arguments)
    logging.basicConfig(stream=sys.stderr, level=logging.INFO, format="%(asctime)s %(message)s")
    for path in make(options.output, seed=options.seed):
        print(path, file=sys.stderr)


if __name__ == "__main__":
    main()
