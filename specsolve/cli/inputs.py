"""From the arguments of ``solve`` and ``check`` to stars: reading, naming, and what the grid has of their lines."""

from __future__ import annotations

import shlex
import sys
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.cli.settings import Settings
from specsolve.errors import InputError, SpecsolveError

if TYPE_CHECKING:
    from specsolve.balance.star import Star
    from specsolve.grid.store import ResponseGrid

STDIN = "-"
START_UP_SECONDS = 45.0  # compilation of the kernels and reading of the atmospheres, rounded up


@dataclass
class Inputs:
    """Stars of all tables, in the order of the command line.

    Attributes
    ----------
    stars : list of Star
    files : list of (str, list of Star)
        Each usable table with its stars.
    failed : list of SpecsolveError
        One for each table that could not be used.
    """

    stars: list[Star] = field(default_factory=list)
    files: list[tuple[str, list[Star]]] = field(default_factory=list)
    failed: list[SpecsolveError] = field(default_factory=list)


def read_inputs(
    tables: Iterable[str],
    settings: Settings,
    *,
    columns: Mapping[str, str],
    ions: Mapping[str, str],
    units: Mapping[str, str],
) -> Inputs:
    """Read all tables; one that cannot be used is told in one line and the others are kept.

    Raises
    ------
    SpecsolveError
        If no table can be used: the error of the first.
    """
    from specsolve.star_table import read_stars

    found = Inputs()
    taken: set[str] = set()
    for name in tables:
        try:
            table = _read(name, columns, units)
            path = None if name == STDIN else Path(name)
            stars = read_stars(table, columns=columns, ions=ions, units=units, path=path)
        except SpecsolveError as error:
            found.failed.append(error)
            continue
        stars = [_unique(star, name, taken) for star in stars]
        found.stars += stars
        found.files.append((name, stars))
    if not found.files:
        for error in found.failed[1:]:
            settings.warn(f"specsolve: {error}")
        raise found.failed[0]
    for error in found.failed:
        settings.warn(f"specsolve: {error}")
    return found


def shared_notes(stars: list[Star]) -> dict[str, str]:
    """Notes made on reading, each once, with the stars it holds for."""
    whom: dict[str, list[str]] = {}
    for star in stars:
        for note in star.notes:
            whom.setdefault(note, []).append(star.name)
    return {
        note: "all stars" if len(names) == len(stars) and len(stars) > 1 else ", ".join(names)
        for note, names in whom.items()
    }


@dataclass(frozen=True)
class Coverage:
    """Distinct lines of some stars: how many there are, the grid has, and a grid build could add."""

    n_lines: int
    n_inside: int
    n_addable: int

    @property
    def n_absent(self) -> int:
        """Lines that the grid does not have."""
        return self.n_lines - self.n_inside


def coverage(stars: Iterable[Star], grid: ResponseGrid) -> Coverage:
    """What a grid has of the lines of some stars.

    Lines are distinct if ion, wavelength (0.01 Angstrom) and excitation potential (0.01 eV) differ. A grid build can
    add those whose excitation potential and log gf the table gives.
    """
    from specsolve.balance.star import nearest_lines

    stars = list(stars)
    if not stars:
        return Coverage(0, 0, 0)
    ion, wavelength, energy, log_gf = (
        np.concatenate([getattr(star, name) for star in stars])
        for name in ("ion", "wavelength_air", "excitation_potential", "log_gf")
    )
    addable = np.isfinite(energy) & np.isfinite(log_gf)
    key = np.rec.fromarrays([ion, np.rint(wavelength / 0.01), np.rint(np.nan_to_num(energy, nan=-1.0) / 0.01)])
    _, first, inverse = np.unique(key, return_index=True, return_inverse=True)
    lines = grid.lines
    inside = nearest_lines(
        wavelength[first], ion[first], energy[first], lines.wavelength_air, lines.ion, lines.excitation_potential
    )
    can_be_added = np.bincount(inverse, weights=addable, minlength=first.size) > 0
    return Coverage(first.size, int((inside >= 0).sum()), int(((inside < 0) & can_be_added).sum()))


def coverage_message(name: str, found: Coverage, grid: ResponseGrid) -> str:
    """How many lines the grid has and the command that adds the others.

    Returns
    -------
    str
        For example "64 of 101 lines are in the grid; `specsolve grid build my.ecsv --output my_grid` adds 37 in
        about 3 min".
    """
    text = f"{found.n_inside} of {found.n_lines} lines are in the grid"
    if found.n_absent == 0:
        return text
    if found.n_addable == 0:
        return f"{text}; a grid build adds the others if the table has excitation_potential and log_gf"
    table = shlex.quote(name) if name != STDIN else "TABLE"
    time = _minutes(found.n_addable, grid)
    return f"{text}; `specsolve grid build {table} --output my_grid` adds {found.n_addable} in about {time}"


def _minutes(n_lines: int, grid: ResponseGrid) -> str:
    from specsolve.grid.engine import estimated_seconds

    n_nodes = int(np.prod(grid.node_shape))
    n_widths = int(np.prod([len(axis) for axis in grid.line_axes]))
    seconds = START_UP_SECONDS + estimated_seconds(n_lines, n_nodes, n_widths)
    return f"{max(1, round(seconds / 60))} min"


def _read(name: str, columns: Mapping[str, str], units: Mapping[str, str]) -> Any:
    import warnings

    from astropy.units import Unit
    from astropy.utils.exceptions import AstropyWarning

    from specsolve.lines.reading import read_table

    with warnings.catch_warnings():
        # What matters in a warning of a reader (a unit not understood, a file cut short) ends as an error below.
        warnings.simplefilter("ignore", AstropyWarning)
        table = _read_stdin() if name == STDIN else read_table(Path(name))
    for ours, unit in units.items():
        theirs = columns.get(ours, ours)
        given = table[theirs].unit if theirs in table.colnames else None
        if given is not None and Unit(given) != Unit(unit):
            raise InputError(f"{name}: column '{theirs}' is in {given}, but --unit says {unit}", path=name)
    return table


def _read_stdin() -> Any:
    from astropy.table import Table

    text = sys.stdin.read()
    if not text.strip():
        raise InputError("standard input is empty")
    style = "ascii.ecsv" if text.startswith("# %ECSV") else "ascii.csv"
    try:
        return Table.read(text.splitlines(), format=style)
    except Exception as error:
        first = (str(error).splitlines() or [type(error).__name__])[0]
        raise InputError(f"standard input is not a readable table ({first})") from error


def _unique(star: Star, file_name: str, taken: set[str]) -> Star:
    """Give the star another name if an earlier table has one of that name."""
    from dataclasses import replace

    name = star.name
    if name in taken:
        name = f"{star.name} ({Path(file_name).name})"
        count = 2
        while name in taken:
            name = f"{star.name} ({Path(file_name).name} {count})"
            count += 1
        star = replace(star, name=name, notes=(*star.notes, f"renamed: another table has a star {star.name}."))
    taken.add(name)
    return star
