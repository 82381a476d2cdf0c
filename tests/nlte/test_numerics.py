"""What the numerical choices of the equilibrium cost in abundance: frequencies, thin lines, sampling, convergence."""

from dataclasses import replace

import numpy as np
import pytest

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import SOLAR_IRON
from specsolve.lines.reading import default_line_list
from specsolve.matter.composition import ELEMENTS, composition_for
from specsolve.matter.equation_of_state import ion_density
from specsolve.nlte import background, equilibrium, line_grid, photoionization
from specsolve.nlte.background import backgrounds
from specsolve.nlte.corrections import Growth
from specsolve.nlte.departures import DEPTHS, LineDepartures, at_depths
from specsolve.nlte.line_levels import line_levels
from specsolve.nlte.packaged import packaged_atom
from specsolve.nlte.recipe import Recipe

pytestmark = pytest.mark.slow

NODES = {"subgiant": (5750.0, 3.5, -2.5, 1.5), "giant": (4500.0, 1.5, -2.5, 1.8), "hot dwarf": (6500.0, 4.0, 0.0, 1.5)}
#: Choice, and the largest mean and rms change of abundance that it may make [dex].
CHOICES = {
    "convergence 1e-6": 5e-4,
    "thin lines with transfer": 5e-4,
    "twice the frequencies": 1e-3,
    "2.5 times the ultraviolet samples": 2e-3,
    "background sampled farther from the lines": 4e-3,
}


def growth(name: str, monkeypatch, choice: str = "") -> Growth:
    teff, logg, mh, vmic = NODES[name]
    tolerance = 1e-6 if choice == "convergence 1e-6" else equilibrium.CONVERGED
    if choice == "thin lines with transfer":
        monkeypatch.setattr(equilibrium, "THIN", equilibrium.THIN / 100.0)
    if choice == "twice the frequencies":
        monkeypatch.setattr(line_grid, "N_FREQUENCIES", 2 * line_grid.N_FREQUENCIES - 1)
        monkeypatch.setattr(line_grid, "FIRST_STEP", 0.5 * line_grid.FIRST_STEP)
    if choice == "2.5 times the ultraviolet samples":
        monkeypatch.setattr(photoionization, "GRID_POINTS", (6000, 1000, 120))
    if choice == "background sampled farther from the lines":
        monkeypatch.setattr(equilibrium, "BACKGROUND_OFFSETS", (-15.0, 15.0))
    atmosphere, lines = AtmosphereStore.packaged().get(teff, logg, mh), default_line_list()
    atom, levels = packaged_atom(), line_levels(lines)
    surroundings = equilibrium.medium(atmosphere, composition_for(mh), atom)
    found = equilibrium.iterate(surroundings, atom, Recipe(), tolerance=tolerance)
    assert found.converged
    departures = LineDepartures(at_depths(found.log_b, found.log_tau), np.array(DEPTHS), levels.lower, levels.upper)
    return Growth.of(atmosphere, lines, vmic, departures)


@pytest.mark.parametrize("name", NODES)
def test_numerical_choices(name, monkeypatch, figure):
    own = SOLAR_IRON + NODES[name][2]
    reference = growth(name, monkeypatch)
    widths = reference.widths(own)
    used = (widths > -6.2) & (widths < -4.8)
    for choice, limit in CHOICES.items():
        with monkeypatch.context() as patch:
            shift = (growth(name, patch, choice).abundances(widths) - own)[used]
        rms = float(np.sqrt(np.nanmean(shift**2)))
        figure(f"{name}: {choice}, mean {np.nanmean(shift):+.4f}, largest {np.nanmax(np.abs(shift)):.4f}, rms", rms, "dex",
               limit=f"{limit:g}")  # fmt: skip
        assert rms < limit, choice


@pytest.mark.parametrize(("name", "limit"), [("subgiant", 0.005), ("hot dwarf", 0.005)])
def test_neglected_feedback_on_the_ultraviolet(name, limit, monkeypatch, figure):
    """The background counts Fe I as in LTE. Fewer atoms let more ultraviolet through: with the Fe I lines, continua and
    residual scaled by the departures found, the corrections grow by less than what S_H leaves open."""
    teff, logg, mh, _ = NODES[name]
    atmosphere, own = AtmosphereStore.packaged().get(teff, logg, mh), SOLAR_IRON + mh
    reference = growth(name, monkeypatch)
    found = equilibrium.solve_equilibrium(atmosphere, composition_for(mh), packaged_atom())
    neutral = np.exp(found.log_b[0])
    iron = ELEMENTS.index("Fe")

    def scaled_density(gas, ion, abundance):
        return ion_density(gas, ion, abundance) * (neutral if ion == "Fe I" else 1.0)

    def scaled(grid, beside, gas, *rest):
        ions = gas.ions.copy()
        ions[iron, 0] *= neutral
        return backgrounds(grid, beside, replace(gas, ions=ions), *rest)

    monkeypatch.setattr(background, "ion_density", scaled_density)
    monkeypatch.setattr(equilibrium, "backgrounds", scaled)
    widths = reference.widths(own)
    used = (widths > -6.2) & (widths < -4.8)
    shift = (growth(name, monkeypatch).abundances(widths) - own)[used]
    figure(f"{name}: feedback of the departures on the background, mean", np.nanmean(shift), "dex", limit=f"{limit:g}")
    assert -1e-3 < np.nanmean(shift) < limit
