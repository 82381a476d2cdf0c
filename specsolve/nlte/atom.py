"""What a model atom is: levels, lines, continua and collisions with hydrogen, as one struct of arrays."""

from __future__ import annotations

from dataclasses import dataclass, fields
from pathlib import Path

import numpy as np

from specsolve.constants import HC_EV_CM

#: Kinds of a radiative transition.
ALLOWED, FORBIDDEN = 0, 1


@dataclass(frozen=True, kw_only=True)
class ModelAtom:
    """A model atom with up to three ionization stages, the lowest called 0.

    Attributes
    ----------
    energy_ev : ndarray, shape (n_levels,)
        Above the ground level of stage 0 [eV]; the energies of higher stages include what their ionization costs.
    weight : ndarray, shape (n_levels,)
        Statistical weight, of a merged level the sum over its members.
    stage : ndarray of int, shape (n_levels,)
        0, 1 or 2: for iron Fe I, Fe II, Fe III.
    parity : ndarray of int, shape (n_levels,)
        0 even, 1 odd, -1 mixed or unknown.
    members : ndarray of int, shape (n_levels,)
        Number of published terms merged in the level.
    name : ndarray of str, shape (n_levels,)
    limit_ev : ndarray, shape (n_levels,)
        Energy of the level that ionization leads to [eV], on the scale of `energy_ev`; `inf` for the highest stage.
    line_lower, line_upper : ndarray of int, shape (n_lines,)
        Places of the levels.
    line_wavelength_cm : ndarray, shape (n_lines,)
        Vacuum wavelength, weighted with gf [cm].
    line_f : ndarray, shape (n_lines,)
        Absorption oscillator strength for the rates, sum(gf) / g_lower.
    line_n_effective : ndarray, shape (n_lines,)
        Effective number of components, (sum gf)^2 / sum gf^2; the transfer of one component uses line_f / n_effective.
    line_gamma_rad : ndarray, shape (n_lines,)
        Radiative damping [s^-1].
    line_kind : ndarray of int, shape (n_lines,)
        `ALLOWED` or `FORBIDDEN` (intercombination and forbidden: no van Regemorter rate).
    continuum_level, continuum_target : ndarray of int, shape (n_continua,)
        Level that is ionized, level that it leads to (the next stage).
    continuum_edge_cm : ndarray, shape (n_continua,)
        Vacuum wavelength of the threshold [cm].
    continuum_sigma : ndarray, shape (n_continua,)
        Cross-section at the threshold [cm^2], falling as the third power of wavelength.
    continuum_n_star : ndarray, shape (n_continua,)
        Effective principal quantum number.
    hydrogen_temperature : ndarray, shape (n_t,)
        [K], increasing.
    hydrogen_upper, hydrogen_lower : ndarray of int, shape (n_h,)
        Pairs of levels with a computed rate of excitation by hydrogen.
    hydrogen_log_rate : ndarray, shape (n_h, n_t)
        log10 of the downward rate coefficient [cm^3 s^-1].
    exchange_level, exchange_ion : ndarray of int, shape (n_x,)
        Pairs of a level and a level of the next stage with a computed rate of charge transfer.
    exchange_log_rate : ndarray, shape (n_x, n_t)
        log10 of the rate coefficient of ion + H- -> level + H [cm^3 s^-1].
    mass : float
        Atomic mass [u].
    source : str
        Published sources and licences.

    Examples
    --------
    >>> atom = two_level_atom()
    >>> atom.n_levels, atom.n_lines
    (2, 1)
    """

    energy_ev: np.ndarray
    weight: np.ndarray
    stage: np.ndarray
    parity: np.ndarray
    members: np.ndarray
    name: np.ndarray
    limit_ev: np.ndarray
    line_lower: np.ndarray
    line_upper: np.ndarray
    line_wavelength_cm: np.ndarray
    line_f: np.ndarray
    line_n_effective: np.ndarray
    line_gamma_rad: np.ndarray
    line_kind: np.ndarray
    continuum_level: np.ndarray
    continuum_target: np.ndarray
    continuum_edge_cm: np.ndarray
    continuum_sigma: np.ndarray
    continuum_n_star: np.ndarray
    hydrogen_temperature: np.ndarray
    hydrogen_upper: np.ndarray
    hydrogen_lower: np.ndarray
    hydrogen_log_rate: np.ndarray
    exchange_level: np.ndarray
    exchange_ion: np.ndarray
    exchange_log_rate: np.ndarray
    mass: float = 55.845
    source: str = ""

    def __post_init__(self) -> None:
        for low, up in (
            (self.line_lower, self.line_upper),
            (self.hydrogen_lower, self.hydrogen_upper),
            (self.continuum_level, self.continuum_target),
            (self.exchange_level, self.exchange_ion),
        ):
            if low.size and (min(low.min(), up.min()) < 0 or max(low.max(), up.max()) >= self.n_levels):
                raise ValueError("a transition of the model atom names a level that does not exist")
        if np.any(self.energy_ev[self.line_upper] <= self.energy_ev[self.line_lower]):
            raise ValueError("the upper level of a line must lie above the lower one")
        if np.any(self.stage[self.line_upper] != self.stage[self.line_lower]):
            raise ValueError("a line must join levels of one stage")
        if np.any(self.stage[self.continuum_target] != self.stage[self.continuum_level] + 1):
            raise ValueError("ionization must lead to the next stage")

    @property
    def n_levels(self) -> int:
        """Number of levels."""
        return self.energy_ev.size

    @property
    def n_lines(self) -> int:
        """Number of (merged) lines."""
        return self.line_lower.size


def save_atom(atom: ModelAtom, path: Path) -> None:
    """Write a model atom as one compressed archive of plain arrays."""
    np.savez_compressed(path, **{item.name: np.asarray(getattr(atom, item.name)) for item in fields(ModelAtom)})


def load_atom(path: Path) -> ModelAtom:
    """Read what `save_atom` wrote."""
    integers = {
        "stage", "parity", "members", "line_lower", "line_upper", "line_kind", "continuum_level", "continuum_target",
        "hydrogen_upper", "hydrogen_lower", "exchange_level", "exchange_ion",
    }  # fmt: skip
    with np.load(path, allow_pickle=False) as data:
        values = {}
        for item in fields(ModelAtom):
            array = data[item.name]
            if item.name in ("mass", "source"):
                values[item.name] = array.item()
            elif item.name == "name":
                values[item.name] = array.astype(str)
            else:
                values[item.name] = array.astype(np.int64 if item.name in integers else float)
    return ModelAtom(**values)


def two_level_atom(energy_ev: float = 2.5, f: float = 0.1, weights: tuple[float, float] = (1.0, 3.0)) -> ModelAtom:
    """An atom of two levels and one line, for textbook cases.

    Parameters
    ----------
    energy_ev : float
        Of the upper level [eV].
    f : float
        Absorption oscillator strength.
    weights : tuple of float
    """
    none, empty = np.zeros(0, dtype=np.int64), np.zeros(0)
    temperature = np.array([2000.0, 20000.0])
    return ModelAtom(
        energy_ev=np.array([0.0, energy_ev]),
        weight=np.array(weights, dtype=float),
        stage=np.array([0, 0]),
        parity=np.array([0, 1]),
        members=np.array([1, 1]),
        name=np.array(["lower", "upper"]),
        limit_ev=np.array([8.0, 8.0]),
        line_lower=np.array([0]),
        line_upper=np.array([1]),
        line_wavelength_cm=np.array([HC_EV_CM / energy_ev]),
        line_f=np.array([f]),
        line_n_effective=np.array([1.0]),
        line_gamma_rad=np.array([1e8]),
        line_kind=np.array([ALLOWED]),
        continuum_level=none,
        continuum_target=none,
        continuum_edge_cm=empty,
        continuum_sigma=empty,
        continuum_n_star=empty,
        hydrogen_temperature=temperature,
        hydrogen_upper=none,
        hydrogen_lower=none,
        hydrogen_log_rate=np.zeros((0, 2)),
        exchange_level=none,
        exchange_ion=none,
        exchange_log_rate=np.zeros((0, 2)),
    )
