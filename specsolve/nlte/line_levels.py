"""Which levels of the model atom a spectral line joins."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass

import numpy as np

from specsolve.constants import HC_EV_CM
from specsolve.lines import LineList
from specsolve.lines.identify import match
from specsolve.lines.transitions import ION_STAGE, load_levels, load_transitions
from specsolve.nlte.atom import ModelAtom
from specsolve.nlte.packaged import DEFAULT_SIZE, Members, packaged_atom, packaged_members

#: A published level is a member if its energy agrees within this [cm-1].
MEMBER_TOLERANCE = 0.05


@dataclass(frozen=True, kw_only=True)
class LineLevels:
    """Levels of the model atom of lines; arrays of shape (n_lines,).

    Attributes
    ----------
    lower, upper : ndarray of int
        Places in the model atom.
    approximate : ndarray of bool
        A level of the line is not a member of the atom, or the line is not identified: the nearest level of the same
        parity stands for it.
    """

    lower: np.ndarray
    upper: np.ndarray
    approximate: np.ndarray


_FOUND: OrderedDict[tuple[str, int], LineLevels] = OrderedDict()
KEPT = 8  # line lists whose levels are remembered


def line_levels(lines: LineList, size: int = DEFAULT_SIZE) -> LineLevels:
    """The levels of lines; those of the last few lists are remembered. See `find_line_levels`.

    Examples
    --------
    >>> found = line_levels(LineList.from_arrays([6301.50], ["Fe I"], [3.654], [-0.718]))
    >>> [str(packaged_atom().name[i]) for i in (found.lower[0], found.upper[0])]
    ['Fe I z 5P*', 'Fe I e 5D']
    """
    key = (lines.identity, size)
    if key not in _FOUND:
        _FOUND[key] = find_line_levels(lines, size)
        while len(_FOUND) > KEPT:
            _FOUND.popitem(last=False)
    return _FOUND[key]


def find_line_levels(lines: LineList, size: int = DEFAULT_SIZE) -> LineLevels:
    """Find the levels of lines: by the identified transition, else by energy and parity.

    Parameters
    ----------
    lines : LineList
        Of Fe I and Fe II.
    size : int
        Of the packaged atom.
    """
    atom, members = packaged_atom(size), packaged_members(size)
    table, levels = load_transitions(), load_levels()
    index = match(lines.ion, lines.wavelength_air, lines.excitation_potential).index
    ends = np.empty((2, len(lines)), dtype=np.int64)
    approximate = np.zeros(len(lines), dtype=bool)
    for i in range(len(lines)):
        stage = ION_STAGE[str(lines.ion[i])] - 1
        if index[i] >= 0:
            row = table[index[i]]
            for k, which in enumerate(("lower", "upper")):
                level = levels[row[which]]
                ends[k, i] = _member(members, stage, level["energy"], level["weight"])
                if ends[k, i] < 0:
                    parity = 1 if "*" in str(level["term"]) else 0
                    ends[k, i] = _nearest(atom, stage, level["energy"] * HC_EV_CM, parity)
                    approximate[i] = True
            continue
        approximate[i] = True
        ends[:, i] = _nearest_pair(atom, stage, lines.excitation_potential[i], lines.upper_energy[i])
    return LineLevels(lower=ends[0], upper=ends[1], approximate=approximate)


def _member(members: Members, stage: int, energy_cm: float, weight: float) -> int:
    """Place of a published level, -1 if it is no member."""
    near = np.flatnonzero((members.stage == stage) & (np.abs(members.energy_cm - energy_cm) < MEMBER_TOLERANCE))
    if not near.size:
        return -1
    same = near[members.weight[near] == weight]
    return int(members.place[(same if same.size else near)[0]])


def _energies(atom: ModelAtom, stage: int) -> tuple[np.ndarray, np.ndarray]:
    """Places of the levels of a stage, and their energies above its ground level [eV]."""
    places = np.flatnonzero(atom.stage == stage)
    ground = 0.0 if stage == 0 else atom.limit_ev[0] - _mean_of_ground(atom)
    return places, atom.energy_ev[places] - ground


def _mean_of_ground(atom: ModelAtom) -> float:
    """Energy of the ground term of Fe II above its lowest level [eV]: the difference between the ionization limits."""
    members = packaged_members()
    ground = (members.stage == 1) & (members.place == np.flatnonzero(atom.stage == 1)[0])
    if not ground.any():
        return 0.0
    return float(np.average(members.energy_cm[ground], weights=members.weight[ground]) * HC_EV_CM)


def _nearest(atom: ModelAtom, stage: int, energy_ev: float, parity: int) -> int:
    places, energies = _energies(atom, stage)
    right = atom.parity[places] == parity
    return int(places[right][np.argmin(np.abs(energies[right] - energy_ev))])


def _nearest_pair(atom: ModelAtom, stage: int, lower_ev: float, upper_ev: float) -> tuple[int, int]:
    """Nearest levels of opposite parity; the better fitting of the two choices."""
    places, energies = _energies(atom, stage)

    def distance(pair):
        return sum(
            abs(float(energies[np.flatnonzero(places == p)[0]]) - e)
            for p, e in zip(pair, (lower_ev, upper_ev), strict=True)
        )

    choices = [(_nearest(atom, stage, lower_ev, p), _nearest(atom, stage, upper_ev, 1 - p)) for p in (0, 1)]
    return min(choices, key=distance)
