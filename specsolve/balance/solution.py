"""What one solve hands back: the frozen `Solution` and its parts.

Everything that a table, a figure or a sheet shows is here as plain floats, strings and arrays; nothing is computed
on demand from
the grid, so a `Solution` can be sent between processes and written without the store that made it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from .line_results import LineResults

if TYPE_CHECKING:
    from .objective_map import ObjectiveMap
    from .samples import Samples

__all__ = [
    "Candidate",
    "Decision",
    "IonAbundance",
    "LineResults",
    "Sensitivity",
    "Solution",
    "Trend",
]

PARAMETER_NAMES = ("teff", "logg", "feh", "vmic")
PARAMETER_UNITS = ("K", "dex(cgs)", "dex", "km/s")
RESIDUAL_NAMES = ("excitation_slope", "ionization_offset", "metallicity_offset", "strength_slope")
RESIDUAL_UNITS = ("dex/eV", "dex", "dex", "dex/dex")
# The residual that is removed when a parameter is fixed, in the order of PARAMETER_NAMES.
RESIDUAL_OF_PARAMETER = dict(zip(PARAMETER_NAMES, RESIDUAL_NAMES, strict=True))

SOLVED = "solved"
TIED = "tied"
OUTSIDE_GRID = "outside_grid"
UNSOLVED = "unsolved"
STATUSES = (SOLVED, TIED, OUTSIDE_GRID, UNSOLVED)


@dataclass(frozen=True, kw_only=True)
class Trend:
    """A straight line through relative line abundances (abundance - zero point), with what an error band needs.

    ``relative_abundance(x) = intercept + slope * (x - pivot)``; the band's variance is
    ``covariance[0,0] + 2 (x-pivot) covariance[0,1] + (x-pivot)^2 covariance[1,1]``.

    Attributes
    ----------
    name : str
        "excitation_slope", "strength_slope" (Fe I) or "fe2_strength_slope" (reported only; not a residual).
    ion : str
    axis : str
        "excitation_potential" or "strength".
    slope, slope_error : float
        Slope at fixed other axis and its error (star's own errors and gf errors together).
    intercept, pivot : float
        Weighted mean of the relative abundance [dex], which is the value at `pivot`.
    covariance : ndarray, shape (2, 2)
        Of (intercept, slope).
    n_lines : int
    """

    name: str
    ion: str
    axis: str
    slope: float
    slope_error: float
    intercept: float
    pivot: float
    covariance: np.ndarray
    n_lines: int


@dataclass(frozen=True, kw_only=True)
class IonAbundance:
    """Mean abundance of one ion at the solution.

    Attributes
    ----------
    ion : str
    abundance : float
        Weighted mean A(Fe) [dex]; nan without lines.
    error_star, error_list : float
        Errors of the mean at fixed parameters: width noise and line-to-line term; log gf (or reference star).
    scatter : float
        Weighted standard deviation of single lines [dex]; nan below two lines.
    line_to_line : float
        The term s in v_i [dex].
    n_lines : int
        Lines that carry weight.
    feh : float
        Weighted mean of abundance - zero_point [dex] (on the zero points of the solve).
    feh_solar_iron : float
        abundance - solar iron (7.46) [dex].
    own_sun : float
        A_sun of this ion from packaged solar widths on the same lines, grid and treatment; nan if too few in common.
    own_sun_n_lines : int
    feh_own_sun : float
        abundance - own_sun [dex].
    """

    ion: str
    abundance: float
    error_star: float
    error_list: float
    scatter: float
    line_to_line: float
    n_lines: int
    feh: float
    feh_solar_iron: float
    own_sun: float
    own_sun_n_lines: int
    feh_own_sun: float


@dataclass(frozen=True, kw_only=True)
class Candidate:
    """One minimum found in the search.

    Attributes
    ----------
    index : int
        Place in the fixed order of the report (best first, then by likelihood); 0 is the reported one.
    parameters : ndarray, shape (4,)
        teff, logg, feh, vmic.
    covariance : ndarray, shape (4, 4)
        Cov_star + Cov_list.
    residuals : ndarray, shape (4,)
        In the order of RESIDUAL_NAMES.
    chi2 : float
        r^T C^-1 r plus Outside terms; ~0 where nothing is over-determined.
    log_likelihood : float
        ln of the density of the measured widths, on the lines common to all candidates.
    delta : float
        2 (ln L_best - ln L), 0 for the best.
    odds : float
        Share of L x prior x sqrt|Cov| among the near-equal candidates; nan for those set aside.
    n_lines : int
    n_seeds : int
        Starting cells or nodes that led here.
    flags : tuple of str
        at_grid_edge, beside_missing_node, outside_grid, stopped_by_missing_node, lines_outside_table,
        not_converged, undetermined, weights_not_settled.
    set_aside : str
        Why the rule does not consider it; empty if it does.
    iterations : int
    """

    index: int
    parameters: np.ndarray
    covariance: np.ndarray
    residuals: np.ndarray
    chi2: float
    log_likelihood: float
    delta: float
    odds: float
    n_lines: int
    n_seeds: int
    flags: tuple[str, ...]
    set_aside: str
    iterations: int


@dataclass(frozen=True, kw_only=True)
class Decision:
    """One recorded step on the way to the reported solution.

    Attributes
    ----------
    step : int
    kind : str
        "search", "set_aside", "likelihood", "same_answer", "vmic_relation", "choose", "tied", "line_cut",
        "down_weight", "fix", "outside".
    subject : str
        The candidate ("candidate 1"), line key or parameter concerned.
    value, threshold : float
        The number compared and its limit; nan where none applies.
    outcome : str
        What was done, one or two words.
    reason : str
        One sentence.
    """

    step: int
    kind: str
    subject: str
    value: float
    threshold: float
    outcome: str
    reason: str


@dataclass(frozen=True, kw_only=True)
class Sensitivity:
    """Change of the mean abundances when one parameter is shifted and the others stay.

    `d_fe1` and `d_fe2` [dex] are nan where the shifted point lies outside the grid.
    """

    parameter: str
    shift: float
    d_fe1: float
    d_fe2: float


@dataclass(frozen=True, kw_only=True)
class Solution:
    """Result for one star and one treatment.

    Attributes
    ----------
    star, treatment : str
    status : str
        "solved", "tied", "outside_grid" or "unsolved".
    reason : str
        One sentence where the status is not "solved"; empty otherwise.
    flags : tuple of str
        Informative flags (few_fe2_lines, at_grid_edge, errors_assumed, fe2_blends, lte_metal_poor, ...).
    parameters : ndarray, shape (4,)
        teff [K], logg [dex cgs], feh [dex], vmic [km/s]; nan if unsolved. With feh fixed this is the fixed value
        and the lines' own
        metallicity stands in `fe1`/`fe2` and in the removed residual.
    fixed : tuple of str
        Names of fixed parameters.
    cov_star, cov_list : ndarray, shape (4, 4)
        Covariances in the order of PARAMETER_NAMES: the star's own errors, and those shared by all stars on one
        line list
        (log gf; in differential work the reference star). Rows of fixed parameters are zero. nan where undefined,
        with a flag.
    systematics : mapping of str to ndarray, shape (4,)
        Shift of the parameters for each systematic term, apart from both covariances; empty where none was asked for.
    residuals : ndarray, shape (4,)
        In the order of RESIDUAL_NAMES, at the solution.
    residual_covariance : ndarray, shape (4, 4)
        C = G V G^T.
    removed_residuals : tuple of str
        Residuals that a fixed parameter took out of the solve (still reported).
    chi2, log_likelihood : float
    degrees_of_freedom : int
        Lines used minus the free parameters and the common abundance's share: n_used - n_free.
    line_scatter : float
        Weighted standard deviation of all used lines about plane and mean [dex].
    fe1, fe2 : IonAbundance
    solar_iron : float
        7.46.
    zero_point_source : str
        "solar iron 7.46 (...)" or the reference star with its parameters.
    lines : LineResults
    trends : tuple of Trend
    candidates : tuple of Candidate
    decisions : tuple of Decision
    sensitivities : tuple of Sensitivity
    outside : tuple of mapping
        What was known from elsewhere: name, mean (at the solution), sigma, source.
    known : mapping
        What the input said of the star beside its lines.
    outside_share : ndarray, shape (4,)
        Share of that in each parameter: 0 from the lines alone, 1 fixed.
    alpha : float
        [alpha/Fe] of the atmosphere [dex]: as given, else the law's at this metallicity.
    alpha_given : bool
    validity : tuple of str
        Sentences of limited validity that apply to this star.
    notes : tuple of str
        Sentences for the reader: assumed errors, matched lines, merged repeats.
    n_input, n_matched, n_used : int
        Lines in the input, in the grid, in the solve.
    unmatched : tuple of str
        Lines of the input that the grid does not have ("5250.21 Fe I").
    iterations : int
    grid_identity, atmospheres_identity, line_list_hash, input_hash : str
    grid_description : str
    fe2_scale : str
        Name of the Fe II log gf scale in use.
    alternative_parameters : mapping of str to ndarray, shape (4,)
        Solutions under other stated scales, e.g. "fe2_alternative"; empty where the list has none.
    options : mapping
        Full configuration, JSON-ready.
    samples : Samples or None
        Joint samples of the parameters, where asked for (`specsolve.balance.samples`).
    objective_map : ObjectiveMap or None
        The objective over temperature and gravity, where asked for (`specsolve.balance.objective_map`).
    provenance : mapping
        Slot that the writer fills (versions, time, command line).
    """

    star: str
    treatment: str
    status: str
    reason: str
    flags: tuple[str, ...]
    parameters: np.ndarray
    fixed: tuple[str, ...]
    cov_star: np.ndarray
    cov_list: np.ndarray
    residuals: np.ndarray
    residual_covariance: np.ndarray
    removed_residuals: tuple[str, ...]
    chi2: float
    log_likelihood: float
    degrees_of_freedom: int
    line_scatter: float
    fe1: IonAbundance
    fe2: IonAbundance
    solar_iron: float
    zero_point_source: str
    lines: LineResults
    trends: tuple[Trend, ...] = ()
    candidates: tuple[Candidate, ...] = ()
    decisions: tuple[Decision, ...] = ()
    sensitivities: tuple[Sensitivity, ...] = ()
    systematics: Mapping[str, np.ndarray] = field(default_factory=dict)
    outside: tuple[Mapping[str, Any], ...] = ()
    known: Mapping[str, Any] = field(default_factory=dict)
    outside_share: np.ndarray = field(default_factory=lambda: np.full(4, np.nan))
    alpha: float = float("nan")
    alpha_given: bool = False
    validity: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    n_input: int = 0
    n_matched: int = 0
    n_used: int = 0
    unmatched: tuple[str, ...] = ()
    iterations: int = 0
    grid_identity: str = ""
    atmospheres_identity: str = ""
    line_list_hash: str = ""
    input_hash: str = ""
    grid_description: str = ""
    fe2_scale: str = ""
    alternative_parameters: Mapping[str, np.ndarray] = field(default_factory=dict)
    options: Mapping[str, Any] = field(default_factory=dict)
    samples: Samples | None = None
    objective_map: ObjectiveMap | None = None
    provenance: Mapping[str, Any] = field(default_factory=dict)

    @property
    def teff(self) -> float:
        """Effective temperature [K]."""
        return float(self.parameters[0])

    @property
    def logg(self) -> float:
        """Surface gravity [dex, cgs]."""
        return float(self.parameters[1])

    @property
    def feh(self) -> float:
        """[Fe/H] [dex] on the zero points of the solve."""
        return float(self.parameters[2])

    @property
    def vmic(self) -> float:
        """Microturbulence [km/s]."""
        return float(self.parameters[3])

    @property
    def errors_star(self) -> np.ndarray:
        """Square roots of the diagonal of `cov_star`, shape (4,)."""
        return np.sqrt(np.diag(self.cov_star))

    @property
    def errors_list(self) -> np.ndarray:
        """Square roots of the diagonal of `cov_list`, shape (4,)."""
        return np.sqrt(np.diag(self.cov_list))

    @property
    def covariance(self) -> np.ndarray:
        """Cov_star + Cov_list, shape (4, 4): the covariance of an absolute statement."""
        return self.cov_star + self.cov_list

    @property
    def errors(self) -> np.ndarray:
        """Square roots of the diagonal of `covariance`, shape (4,)."""
        return np.sqrt(np.diag(self.covariance))

    def with_provenance(self, provenance: Mapping[str, Any]) -> Solution:
        """The same solution with its provenance slot filled."""
        return replace(self, provenance=dict(provenance))
