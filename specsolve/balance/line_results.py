"""Per-line numbers of a `Solution`."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, kw_only=True)
class LineResults:
    """Per-line numbers of one star, all arrays of shape (n_lines,) in canonical order (ion, wavelength, excitation
    potential).

    Lines of the input that never reached the solve (not in the grid, bad width, ...) are here too, unused, with the
    reason.

    Attributes
    ----------
    key : ndarray of str
        Identity of the line in the grid; empty if it has none there.
    wavelength_air : ndarray
        [Angstrom].
    ion : ndarray of str
        "Fe I" or "Fe II".
    excitation_potential : ndarray
        [eV].
    log_gf, log_gf_error : ndarray
        Value used and its error [dex]; the error is nan where the source gives none (it is then part of the
        line-to-line term).
    equivalent_width, equivalent_width_error : ndarray
        [mA]; `error_assumed` marks errors that the input did not give.
    error_assumed : ndarray of bool
    reduced_width : ndarray
        log10(W/lambda) as measured.
    predicted_width : ndarray
        Width [mA] that the solution and the common abundance of the ion predict.
    predicted_reduced_width : ndarray
        log10 of the same over the wavelength; the cuts act on this.
    strength : ndarray
        The strength axis of the plane (mixture of measured and predicted reduced width, uncorrelated with the
        residual).
    abundance : ndarray
        A(Fe) [dex] at the solution.
    abundance_error : ndarray
        sqrt of all of v_i: width noise, log gf, line-to-line term [dex].
    width_error_dex : ndarray
        The part of it from the width alone [dex].
    zero_point : ndarray
        Zero point subtracted [dex]: solar iron, or the reference star's abundance of this line.
    relative_abundance : ndarray
        abundance - zero_point [dex].
    deviation : ndarray
        relative abundance minus the fitted plane (Fe I) or mean (Fe II) [dex].
    standardized : ndarray
        deviation / abundance_error.
    robust_weight : ndarray
        1 = full weight, less = down-weighted; 0 = not used.
    weight : ndarray
        robust_weight / v_i [dex^-2]; zero where not used.
    d_abundance : ndarray, shape (n_lines, 4)
        dA/d(teff, logg, mh, vmic) at fixed width [dex per K, dex, dex, km/s].
    d_abundance_d_width : ndarray
        dA/dlog10(W).
    influence : ndarray, shape (n_lines, 4)
        Change of (teff, logg, feh, vmic) when this line alone is left out.
    used : ndarray of bool
    reason : ndarray of str
        Why a line was dropped or down-weighted; empty for a line of full weight.
    interpolation_flags : ndarray of uint8
        Flag bits of the grid interpolation.
    """

    key: np.ndarray
    wavelength_air: np.ndarray
    ion: np.ndarray
    excitation_potential: np.ndarray
    log_gf: np.ndarray
    log_gf_error: np.ndarray
    equivalent_width: np.ndarray
    equivalent_width_error: np.ndarray
    error_assumed: np.ndarray
    reduced_width: np.ndarray
    predicted_width: np.ndarray
    predicted_reduced_width: np.ndarray
    strength: np.ndarray
    abundance: np.ndarray
    abundance_error: np.ndarray
    width_error_dex: np.ndarray
    zero_point: np.ndarray
    relative_abundance: np.ndarray
    deviation: np.ndarray
    standardized: np.ndarray
    robust_weight: np.ndarray
    weight: np.ndarray
    d_abundance: np.ndarray
    d_abundance_d_width: np.ndarray
    influence: np.ndarray
    used: np.ndarray
    reason: np.ndarray
    interpolation_flags: np.ndarray

    def __len__(self) -> int:
        return len(self.wavelength_air)
