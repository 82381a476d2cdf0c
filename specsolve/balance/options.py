"""Options of a solve, with their stated defaults."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any


@dataclass(frozen=True, kw_only=True)
class Options:
    """What a solve may be told; every value is written into the output.

    Attributes
    ----------
    loss : str
        "huber" (k 1.345), "student" (nu 4) or "none".
    reduced_width_range : (float, float)
        Cut on the PREDICTED log10(W/lambda); weaker lines are noise, stronger ones damping (common practice, no
        source).
    excitation_range : (float, float)
        [eV].
    wavelength_range : (float, float)
        [Angstrom].
    worst_grade : int or None
        Lines whose log gf has a worse (larger) grade are left out; ungraded lines (0) stay, and so do lines whose
        log gf comes with the
        star. None: 3, in differential work 4 (there log gf cancels).
    fe2_scale : str
        "default" or "alternative": the column of the line list that Fe II log gf come from (lines without a second
        value keep the first).
    near_equal : float
        Candidates with 2 (ln L_best - ln L) below this are near-equal (6 = odds 20 : 1).
    vmic_relation : bool
        Let a published vmic(teff, logg) relation break a tie.
    max_iterations : int
        Newton steps per candidate.
    max_seeds : int
        Starting points refined per star; more would be said in the search decision.
    samples : int
        Joint samples of the parameters a star (`specsolve.balance.samples`).
    seed : int
        Of these samples; each star has its own stream, so the order of the stars does not matter.
    objective_map : bool
        Map the objective over temperature and gravity, if both are free (`specsolve.balance.objective_map`).

    Examples
    --------
    >>> Options(loss="none").loss
    'none'
    """

    loss: str = "huber"
    reduced_width_range: tuple[float, float] = (-6.0, -4.8)
    excitation_range: tuple[float, float] = (0.0, 6.0)
    wavelength_range: tuple[float, float] = (4000.0, 9000.0)
    worst_grade: int | None = None
    fe2_scale: str = "default"
    near_equal: float = 6.0
    vmic_relation: bool = True
    max_iterations: int = 60
    max_seeds: int = 24
    samples: int = 0
    seed: int = 0
    objective_map: bool = False

    def __post_init__(self) -> None:
        if self.loss not in ("huber", "student", "none"):
            raise ValueError(f"loss = {self.loss!r} is not one of 'huber', 'student', 'none'")
        if self.fe2_scale not in ("default", "alternative"):
            raise ValueError(f"fe2_scale = {self.fe2_scale!r} is not one of 'default', 'alternative'")
        if self.samples < 0 or self.seed < 0:
            raise ValueError("samples and seed must not be negative")
        for name in ("reduced_width_range", "excitation_range", "wavelength_range"):
            low, high = getattr(self, name)
            if not low < high:
                raise ValueError(f"{name} = ({low:g}, {high:g}) is empty")
            object.__setattr__(self, name, (float(low), float(high)))

    def as_dict(self) -> dict[str, Any]:
        """Plain values for a header; `Options.from_dict` reads them back."""
        return {key: list(value) if isinstance(value, tuple) else value for key, value in asdict(self).items()}

    @classmethod
    def from_dict(cls, values: dict[str, Any]) -> Options:
        """Inverse of `as_dict`; names that this version does not know are ignored."""
        known = {key: value for key, value in values.items() if key in cls.__dataclass_fields__}
        return cls(**{key: tuple(value) if isinstance(value, list) else value for key, value in known.items()})
