"""Options of a measurement, with their defaults."""

from __future__ import annotations

from dataclasses import dataclass, field

from .predict import Guess


@dataclass(frozen=True, kw_only=True)
class MeasureOptions:
    """How widths are measured.

    Attributes
    ----------
    guess : Guess
        About what star it is; only predicts neighbours and shapes.
    window : float
        Half width of the pieces of spectrum around the lines [Angstrom].
    knot_spacing : float
        Distance of the knots of the local continuum [Angstrom].
    neighbour_error : float
        1-sigma of ln W of a predicted neighbour: 0.2 dex of log gf and as much for abundance and prediction.
    shift_error : float
        1-sigma of the position of a line [km/s].
    stretch_error : float
        1-sigma of ln of a line's width against the common broadening.
    wing_error : float
        1-sigma of how far a line's shape may be from that of its width, in opacity [dex]: the guess has another
        microturbulence and another damping than the star.
    least_neighbour_depth : float
        Neighbours that are shallower are taken out as predicted.
    shape_error : float
        Error of the shapes, part of the depth.
    unknown_part : float
        Part of the neighbours that no list holds, for the error.
    vsini_limit : float
        Rotation above this is said; widths are validated below [km/s].
    """

    guess: Guess = field(default_factory=Guess)
    window: float = 7.0
    knot_spacing: float = 10.0
    neighbour_error: float = 0.6
    shift_error: float = 0.4
    stretch_error: float = 0.04
    wing_error: float = 0.2
    least_neighbour_depth: float = 0.004
    shape_error: float = 0.01
    unknown_part: float = 0.15
    vsini_limit: float = 15.0
