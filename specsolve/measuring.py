"""From a file with a spectrum to the equivalent widths of a line list.

Read, predict, velocity, measure; then solve the widths roughly, predict again for the star that was found, and measure
again until the star stays: the prediction only says where lines are, about how strong, and what their neighbours do.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from concurrent.futures import Executor, as_completed
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.constants import LIGHT_SPEED_CM_S
from specsolve.errors import InputError, SpecsolveError, SpectrumError
from specsolve.lines import LineList
from specsolve.spectrum.barycentre import correction
from specsolve.spectrum.measure import measure_lines
from specsolve.spectrum.options import MeasureOptions
from specsolve.spectrum.orders import merged, overlap_notes
from specsolve.spectrum.predict import Guess, Prediction, predict
from specsolve.spectrum.raw import ReadOptions
from specsolve.spectrum.read import read_spectrum
from specsolve.spectrum.types import FLAG_NOT_COVERED, Measurements, Spectrum
from specsolve.spectrum.velocity import SEARCH_RANGE, Velocity, measure_velocity, to_rest

SAME_STAR = {"teff": 200.0, "logg": 0.4, "mh": 0.25, "vmic": 0.3}
"""A new guess nearer than this to the last one [K, dex, dex, km/s] changes no width by 0.1 mA (tests)."""
LEAST_COVERED = 10
"""Fewer lines of the list inside the spectrum are told: four parameters cannot follow from them."""
SEPARATE, MERGED = "separate", "merged"
THINNED_PIXELS = 2000
"""Pixels that stay of a spectrum that is not drawn: enough for its signal to noise."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Task:
    """What to do with one spectrum.

    Attributes
    ----------
    path : str
    lines : LineList
    reading : ReadOptions
    options : MeasureOptions
    velocity : float or None
        Taken as it is [km/s]; searched if None.
    search : (float, float)
        Velocities searched [km/s].
    barycentric : bool
        Report the correction to the barycentre.
    orders : str
        "separate" or "merged".
    guess : Guess or None
        About what star; found by the widths themselves if None.
    passes : int
        At most so many rounds of measuring.
    grid : str or None
        Response grid for the rough solves; the packaged one if None.
    treatment : str or None
        Of the rough solves; the grid's default if None.
    pixels : bool
        Keep all pixels and the fits, for figures; else a thousandth of the memory, for many spectra.
    """

    path: str
    lines: LineList
    reading: ReadOptions = field(default_factory=ReadOptions)
    options: MeasureOptions = field(default_factory=MeasureOptions)
    velocity: float | None = None
    search: tuple[float, float] = SEARCH_RANGE
    barycentric: bool = False
    orders: str = SEPARATE
    guess: Guess | None = None
    passes: int = 3
    grid: str | None = None
    treatment: str | None = None
    pixels: bool = True


@dataclass(frozen=True, kw_only=True, eq=False)
class Measured:
    """What came of one spectrum.

    Attributes
    ----------
    path, star : str
    spectrum : Spectrum or None
        In the star's rest frame; None if it failed.
    velocity : Velocity or None
    measurements : Measurements or None
    guess : Guess
        The star of the last prediction.
    guess_source : str
    notes : tuple of str
    error : SpecsolveError or None
        Why it failed.
    """

    path: str
    star: str
    spectrum: Spectrum | None = None
    velocity: Velocity | None = None
    measurements: Measurements | None = None
    guess: Guess = field(default_factory=Guess)
    guess_source: str = ""
    notes: tuple[str, ...] = ()
    error: SpecsolveError | None = None


def measure_spectrum(task: Task) -> Measured:
    """Measure one spectrum.

    Raises
    ------
    SpecsolveError
        The spectrum cannot be read, has no velocity, or covers no line.

    Examples
    --------
    >>> from specsolve.lines.reading import default_line_list
    >>> found = measure_spectrum(Task(path="star.fits", lines=default_line_list()))  # doctest: +SKIP
    """
    spectrum = read_spectrum(task.path, task.reading)
    notes = list(overlap_notes(spectrum)) if spectrum.n_orders > 1 else []
    if spectrum.n_orders > 1 and task.orders == MERGED:
        spectrum = merged(spectrum)
    guess = task.guess or Guess()
    prediction = predict(task.lines, guess)
    velocity = _velocity(task, spectrum, prediction)
    rest = to_rest(spectrum, velocity)
    measured = _measured(rest, task, prediction)
    _check_covered(task, rest, measured, notes)
    source = "said" if task.guess else "default"
    for number in range(1, task.passes if task.guess is None else 1):
        found, why = rough_star(measured, task)
        if found is None:
            notes.append(
                f"the star was not found from its first widths ({why}): lines are predicted for teff {guess.teff:.0f}, "
                f"logg {guess.logg:.2f}, [Fe/H] {guess.mh:.2f}; say --guess"
            )
            break
        near = all(abs(getattr(found, name) - getattr(guess, name)) < step for name, step in SAME_STAR.items())
        if near:
            break
        try:
            prediction = predict(task.lines, found)
        except InputError as error:
            notes.append(
                f"the widths make a star outside the packaged atmospheres ({error}); the last prediction stays"
            )
            break
        guess, source = found, f"solved {number} time{'s' if number > 1 else ''}"
        measured = _measured(rest, task, prediction)
    if task.velocity is None and source.startswith("solved"):
        velocity = _velocity(task, spectrum, prediction)
    return Measured(
        path=task.path,
        star=spectrum.star,
        spectrum=rest if task.pixels else rest.select(slice(None, None, max(1, rest.n_pixels // THINNED_PIXELS))),
        velocity=velocity,
        measurements=measured,
        guess=guess,
        guess_source=source,
        notes=tuple(dict.fromkeys(note.rstrip(".") for note in (*rest.notes, *notes, *measured.notes))),
    )


def rough_star(measured: Measurements, task: Task) -> tuple[Guess | None, str]:
    """The star that the widths make, as a guess for the next prediction; or None and why not."""
    from specsolve.balance.batch import Setting, solve_star
    from specsolve.balance.solve import open_grid

    grid = open_grid(task.grid)
    treatment = grid.treatments_asked(task.treatment)[-1]
    solution = solve_star(star_of_widths(measured), grid, Setting(treatment=treatment))
    teff, logg, feh, vmic = (float(value) for value in solution.parameters)
    if not np.all(np.isfinite([teff, logg, feh, vmic])):
        return None, solution.reason or solution.status
    return Guess(teff=teff, logg=logg, mh=feh, vmic=vmic), ""


def star_of_widths(measured: Measurements) -> Any:
    """The measured lines as a `specsolve.Star`."""
    from specsolve.balance.star import Star

    return Star.from_arrays(
        measured.star,
        measured.wavelength_air,
        measured.ion,
        measured.equivalent_width,
        measured.equivalent_width_error,
        excitation_potential=measured.excitation_potential,
        log_gf=measured.log_gf,
        use=measured.use,
    )


def measure_stream(tasks: Sequence[Task], executor: Executor | None = None) -> Iterator[tuple[int, Measured]]:
    """(place, Measured) as spectra are finished; one that fails carries its error and the others go on."""
    if executor is None:
        for place, task in enumerate(tasks):
            yield place, measure_safely(task)
        return
    futures = {executor.submit(measure_safely, task): place for place, task in enumerate(tasks)}
    try:
        for future in as_completed(futures):
            yield futures[future], future.result()
    except BaseException:
        for future in futures:
            future.cancel()
        raise


def measure_safely(task: Task) -> Measured:
    """As `measure_spectrum`; what goes wrong in this spectrum becomes its `error`."""
    from specsolve.spectrum.pixels import star_of

    name = task.reading.star or star_of(task.path)
    try:
        return measure_spectrum(task)
    except SpecsolveError as error:
        return Measured(path=task.path, star=name, error=error)
    except (ArithmeticError, LookupError, RuntimeError, TypeError, ValueError) as error:
        import logging

        logging.getLogger(__name__).info("%s", task.path, exc_info=True)
        words = f"{task.path}: unexpected {type(error).__name__}: {' '.join(str(error).split())}"
        return Measured(path=task.path, star=name, error=SpectrumError(words, path=task.path))


def _measured(rest: Spectrum, task: Task, prediction: Prediction) -> Measurements:
    """Widths; correlated pixels count as fewer independent ones, by larger errors."""
    pixels = rest.replace(sigma=rest.sigma * np.sqrt(rest.correlation))
    return measure_lines(pixels, task.lines, options=task.options, windows=task.pixels, prediction=prediction)


def _velocity(task: Task, spectrum: Spectrum, prediction: Prediction) -> Velocity:
    own = prediction.lines.own >= 0
    wavelength = prediction.lines.wavelength_air[own]
    if task.velocity is not None:
        nan = float("nan")
        found = Velocity(value=task.velocity, error=nan, significance=nan, fwhm=nan, depth=nan, n_lines=int(own.sum()))
    else:
        width_ma = prediction.relative_width[own] * wavelength * 1e3
        found = measure_velocity(spectrum, wavelength, width_ma, task.search)
    if not task.barycentric:
        return found
    from dataclasses import replace

    value, reason = correction(spectrum.header)
    value *= 1.0 + found.value / (LIGHT_SPEED_CM_S * 1e-5)
    return replace(
        found, barycentric=value, barycentric_reason=reason, notes=(*found.notes, f"barycentric correction: {reason}")
    )


def _check_covered(task: Task, rest: Spectrum, measured: Measurements, notes: list[str]) -> None:
    covered = int(np.count_nonzero((measured.flags & FLAG_NOT_COVERED) == 0))
    low, high = rest.wavelength_air.min(), rest.wavelength_air.max()
    where = f"the spectrum ({low:.0f}-{high:.0f} Angstrom) covers {covered} of {len(measured)} lines"
    if covered == 0:
        raise SpectrumError(f"{Path(task.path)}: {where}.", path=task.path, value=0.0)
    if covered < LEAST_COVERED:
        notes.append(f"{where}: too few for four parameters")
