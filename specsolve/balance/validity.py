"""Where a result is weaker than its error bars say: flags, and the sentences that leave with every output."""

from __future__ import annotations

import numpy as np

from .solution import LineResults

# Limits of validity of the atmospheres and of LTE, as stated in the documentation of this package.
VALIDATED_TEFF_K = (4500.0, 6500.0)
COOL_TEFF_K = 4250.0
HOT_TEFF_K = 6750.0
LOW_LOGG = 1.5
K_DWARF_TEFF_K, K_DWARF_LOGG = 5000.0, 4.3
METAL_POOR_FEH = -1.5
NLTE_GIANT_TEFF_K, NLTE_GIANT_LOGG = 5000.0, 3.0
NLTE_UNVALIDATED_FEH, NLTE_UNVALIDATED_LOGG, NLTE_UNVALIDATED_TEFF_K = -3.0, 1.0, 6500.0
FEW_FE2_LINES, FEW_FE1_LINES = 4, 20
STRONG_INFLUENCE = 1.0  # one line moves a parameter by more than this many star errors


def validity_statements(parameters: np.ndarray, treatment: str) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Flags and sentences that apply at these parameters (teff, logg, feh, vmic) and for this treatment."""
    teff, logg, feh, _ = parameters
    table = []
    if not np.isfinite(parameters).all():
        return (), ()
    if not VALIDATED_TEFF_K[0] <= teff <= VALIDATED_TEFF_K[1]:
        table.append(("outside_validated_teff", "outside the validated range of 4500-6500 K"))
    if teff < COOL_TEFF_K:
        table.append(("cool_no_molecules", "below 4250 K: no molecules in the blanketing of the atmospheres"))
    if teff > HOT_TEFF_K:
        table.append(("hot_no_balmer", "above 6750 K: no Balmer-line opacity in the atmospheres"))
    if logg < LOW_LOGG:
        table.append(("plane_parallel", "log g < 1.5: plane-parallel atmospheres err by 0.03-0.1 dex"))
    if teff < K_DWARF_TEFF_K and logg > K_DWARF_LOGG:
        table.append(
            (
                "fe2_blends",
                "K dwarf (< 5000 K, log g > 4.3): blends raise Fe II; take the gravity from elsewhere and fix it",
            )
        )
    if feh < METAL_POOR_FEH and treatment == "lte":
        table.append(("lte_metal_poor", "[Fe/H] < -1.5 in LTE: teff and log g are physically biased low"))
    if feh < METAL_POOR_FEH and teff < NLTE_GIANT_TEFF_K and logg < NLTE_GIANT_LOGG:
        table.append(
            (
                "wants_outside_teff",
                "cool metal-poor giant: the excitation balance is unsafe in 1D even beyond LTE; "
                "give a temperature from elsewhere (Bergemann et al. 2012)",
            )
        )
    beyond = feh < NLTE_UNVALIDATED_FEH or logg < NLTE_UNVALIDATED_LOGG or teff > NLTE_UNVALIDATED_TEFF_K
    if beyond and treatment != "lte":
        table.append(
            ("nlte_unvalidated", "departures from LTE are not validated at [Fe/H] < -3, log g < 1 or above 6500 K")
        )
    if logg < NLTE_GIANT_LOGG:
        table.append(("alpha_law", "giant: [alpha/Fe] off the atmospheres' law by 0.2 moves log g by 0.05-0.1"))
    return tuple(flag for flag, _ in table), tuple(text for _, text in table)


def line_flags(
    lines: LineResults, errors_star: np.ndarray, covered: np.ndarray, differential: bool = False
) -> tuple[str, ...]:
    """Informative flags from the lines themselves.

    Parameters
    ----------
    lines : LineResults
    errors_star : ndarray, shape (4,)
    covered : ndarray of bool, shape (4,)
        Free parameters.
    differential : bool
        log gf cancels, so that its errors do not matter.
    """
    used = lines.used
    flags = []
    if int((used & (lines.ion == "Fe II")).sum()) < FEW_FE2_LINES:
        flags.append("few_fe2_lines")
    if int((used & (lines.ion == "Fe I")).sum()) < FEW_FE1_LINES:
        flags.append("few_fe1_lines")
    if (lines.error_assumed & used).any():
        flags.append("errors_assumed")
    if not differential and np.isnan(lines.log_gf_error[used]).any():
        flags.append("log_gf_errors_unknown")
    with np.errstate(invalid="ignore"):
        strong = np.abs(lines.influence[used][:, covered]) > STRONG_INFLUENCE * errors_star[covered]
    if strong.any():
        flags.append("single_line_decides")
    return tuple(flags)
