"""What may be varied in the statistical equilibrium, and the frozen values."""

from __future__ import annotations

from dataclasses import dataclass

#: Factor S_H on the classical rates of hydrogen collisions where no computed ones exist. Frozen: the likelihood of
#: `python -m specsolve.nlte.calibration` has its maximum at 1.2 and is weakly constrained (chi squared rises by 0.9 over a
#: factor 3), so that the formula stands unscaled.
HYDROGEN_FACTOR = 1.0
#: The same for levels of Fe II, for which no rates have been computed: they hold Fe II near LTE.
ION_HYDROGEN_FACTOR = 1.0
#: Factor on the ultraviolet opacity in proportion to Fe I, see `background.residual_cross_section`; 1 is the calibrated.
UV_RESIDUAL = 1.0


@dataclass(frozen=True, kw_only=True)
class Recipe:
    """Factors on the ingredients of the statistical equilibrium.

    Attributes
    ----------
    hydrogen_factor : float
        S_H on the classical rates of hydrogen collisions among levels of the neutral atom.
    ion_hydrogen_factor : float
        The same among levels of the ion.
    hydrogen_scale : float
        Factor on all hydrogen collisions, the computed ones included.
    electron_factor : float
        Factor on all electron collisions.
    photoionization_factor : float
        Factor on all photoionization cross-sections; 10 shows what the hydrogenic ones may miss.
    uv_residual : float
        Factor on the residual ultraviolet opacity; 0 the line lists alone, 1 calibrated on the Sun.

    Examples
    --------
    >>> Recipe().hydrogen_scale
    1.0
    """

    hydrogen_factor: float = HYDROGEN_FACTOR
    ion_hydrogen_factor: float = ION_HYDROGEN_FACTOR
    hydrogen_scale: float = 1.0
    electron_factor: float = 1.0
    photoionization_factor: float = 1.0
    uv_residual: float = UV_RESIDUAL
