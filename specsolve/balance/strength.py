"""The strength axis of the plane, and the errors of a line.

Measured widths carry the same noise as the abundances that come from them, so a slope against them is biased and the
microturbulence comes out too high (Magain 1984, A&A 134, 189); predicted widths carry the log gf errors instead,
which biases it downwards
where those dominate. The mixture

    x = (x_measured s_d^2 + x_predicted s_W^2) / (s_W^2 + s_d^2),    s_d = sigma_gf dlogW/dA,   s_W = sigma(log W)

is uncorrelated with the abundance residual; with no gf error (differential work) it becomes the predicted width.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

LN10 = float(np.log(10.0))


@dataclass(frozen=True)
class LineVariances:
    """Variances of line abundances by origin [dex^2], each of shape (n_lines,).

    Attributes
    ----------
    width : from the width error, (dA/dlogW sigma_logW)^2
    gf : from log gf (list)
    scatter : line-to-line term s^2 of the line's ion (star)
    """

    width: np.ndarray
    gf: np.ndarray
    scatter: np.ndarray

    @property
    def star(self) -> np.ndarray:
        """The star's own part: width noise and line-to-line term."""
        return self.width + self.scatter

    @property
    def total(self) -> np.ndarray:
        """v_i of the weights."""
        return self.width + self.gf + self.scatter


def sigma_log_width(width: np.ndarray, width_error: np.ndarray) -> np.ndarray:
    """Error of log10 W [dex] from width and error in one unit (first order)."""
    return width_error / (width * LN10)


def line_variances(
    d_abundance_d_width: np.ndarray,
    sigma_logw: np.ndarray,
    sigma_gf: np.ndarray,
    line_to_line: np.ndarray,
) -> LineVariances:
    """v_i by origin; an unknown (nan) log gf error counts zero and is then part of the line-to-line term.

    Parameters
    ----------
    d_abundance_d_width : ndarray, shape (n_lines,)
        dA/dlog10(W).
    sigma_logw : ndarray, shape (n_lines,)
        Error of log10 W [dex].
    sigma_gf : ndarray, shape (n_lines,)
        Error of log gf [dex]; nan = not known.
    line_to_line : ndarray, shape (n_lines,)
        s of the line's ion [dex].
    """
    return LineVariances(
        width=(d_abundance_d_width * sigma_logw) ** 2,
        gf=np.where(np.isnan(sigma_gf), 0.0, sigma_gf) ** 2,
        scatter=line_to_line**2,
    )


def strength_axis(
    measured: np.ndarray,
    predicted: np.ndarray,
    variances: LineVariances,
    sigma_gf: np.ndarray,
    differential: bool = False,
) -> np.ndarray:
    """The strength axis x [dex], shape (n_lines,).

    Parameters
    ----------
    measured, predicted : ndarray, shape (n_lines,)
        log10(W/lambda).
    variances : LineVariances
        By origin, at the same point.
    sigma_gf : ndarray, shape (n_lines,)
        Error of log gf; where it is nan the line-to-line term stands for it, elsewhere that term counts as error of
        the width.
    differential : bool
        log gf cancels: the line-to-line term counts as error of the width for all lines.
    """
    unknown = np.isnan(sigma_gf) & (not differential)
    gf = variances.gf + np.where(unknown, variances.scatter, 0.0)
    width = variances.width + np.where(unknown, 0.0, variances.scatter)
    total = gf + width
    # s_d^2 and s_W^2 are these variances over (dA/dlogW)^2; the factor cancels in the ratio.
    share = np.divide(gf, total, out=np.zeros_like(total), where=total > 0.0)
    return measured * share + predicted * (1.0 - share)
