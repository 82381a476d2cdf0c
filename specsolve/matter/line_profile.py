"""Voigt function: the NumPy reference and a fast rational approximation of relative accuracy 1e-4."""

from __future__ import annotations

import numpy as np


def voigt(a, v):
    """Voigt function H(a, v) = a/pi * integral of exp(-y^2) / ((v - y)^2 + a^2) dy; integral over v is sqrt(pi).

    Parameters
    ----------
    a : float or ndarray
        Damping parameter, positive or zero.
    v : float or ndarray
        Distance from the line centre in Doppler widths.

    Returns
    -------
    ndarray
        Real part of the Faddeeva function, to machine precision.

    Examples
    --------
    >>> round(float(voigt(0.0, 1.0)), 4)
    0.3679
    """
    from scipy.special import wofz

    return wofz(np.asarray(v, float) + 1j * np.asarray(a, float)).real


def voigt_fast(a: float, v: float) -> float:
    """Voigt function of two numbers, for compilation; Humlicek 1982, JQSRT 27, 437 (coefficients from memory).

    Relative accuracy 1e-4, which a test holds against `voigt`.
    """
    v = abs(v)
    s = v + a
    t = complex(a, -v)
    if s >= 15.0:
        return (t * 0.5641896 / (0.5 + t * t)).real
    if s >= 5.5:
        u = t * t
        return (t * (1.410474 + u * 0.5641896) / (0.75 + u * (3.0 + u))).real
    if a >= 0.195 * v - 0.176:
        top = 16.4955 + t * (20.20933 + t * (11.96482 + t * (3.778987 + t * 0.5642236)))
        low = 16.4955 + t * (38.82363 + t * (39.27121 + t * (21.69274 + t * (6.699398 + t))))
        return (top / low).real
    u = t * t
    top = t * (
        36183.31 - u * (3321.9905 - u * (1540.787 - u * (219.0313 - u * (35.76683 - u * (1.320522 - u * 0.56419)))))
    )
    low = 32066.6 - u * (
        24322.84 - u * (9022.228 - u * (2186.181 - u * (364.2191 - u * (61.57037 - u * (1.841439 - u)))))
    )
    return np.exp(u.real) * np.cos(u.imag) - (top / low).real
