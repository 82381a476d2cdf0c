"""Corrections against published ones: size, signs, trends, and how they react to the recipe."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from specsolve.atmosphere.between import atmosphere_between
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import LIGHT_SPEED_CM_S, SOLAR_IRON
from specsolve.lines.reading import default_line_list
from specsolve.matter.composition import composition_for
from specsolve.nlte import equilibrium
from specsolve.nlte.collisions import LINE_CROSS_SECTION, collision_flows, hydrogen_allowed
from specsolve.nlte.corrections import Growth
from specsolve.nlte.departures import DEPTHS, LineDepartures, at_depths
from specsolve.nlte.equilibrium import Medium, iterate, medium
from specsolve.nlte.line_levels import line_levels
from specsolve.nlte.packaged import packaged_atom
from specsolve.nlte.recipe import Recipe

pytestmark = pytest.mark.slow

WEAKEST, STRONGEST = -6.2, -4.7  # log10(W / lambda) of the lines that count
#: Korn, Shi & Gehren 2003, A&A 407, 691, table 3: A(Fe I) in NLTE minus LTE for S_H = 0 and 3; parameters Teff, log g,
#: [Fe/H], xi from memory. The line-to-line scatter of their abundances is 0.04 to 0.09 dex.
KORN = {
    "HD 103095": ((5070.0, 4.66, -1.35, 0.95), 0.12, -0.02),
    "HD 19445": ((6032.0, 4.40, -2.08, 1.75), 0.40, 0.00),
    "HD 84937": ((6346.0, 4.00, -2.16, 1.80), 0.40, 0.03),
    "Procyon": ((6508.0, 4.04, 0.0, 1.85), 0.03, 0.01),
    "Sun": ((5772.0, 4.44, 0.0, 1.0), 0.08, 0.03),
}


def drawin_only():
    """The atom without computed hydrogen collisions, as before they existed."""
    atom = packaged_atom()
    none, rates = np.zeros(0, dtype=np.int64), np.zeros((0, atom.hydrogen_temperature.size))
    return replace(
        atom, hydrogen_upper=none, hydrogen_lower=none, hydrogen_log_rate=rates, exchange_level=none, exchange_ion=none,
        exchange_log_rate=rates,
    )  # fmt: skip


@cache
def place(teff: float, logg: float, mh: float):
    atmosphere = atmosphere_between(AtmosphereStore.packaged(), teff, logg, mh)
    return atmosphere, medium(atmosphere, composition_for(mh), packaged_atom())


def corrections(theta, recipe: Recipe | None = None, atom=None) -> dict[str, float]:
    """Mean corrections at fixed width: Fe I below and above 2.7 eV, all of it, Fe II."""
    teff, logg, mh, vmic = theta
    surroundings: Medium
    atmosphere, surroundings = place(teff, logg, mh)
    lines = default_line_list()
    found, levels = iterate(surroundings, atom or packaged_atom(), recipe or Recipe()), line_levels(lines)
    assert found.converged, found.reason
    departures = LineDepartures(at_depths(found.log_b, found.log_tau), np.array(DEPTHS), levels.lower, levels.upper)
    own = SOLAR_IRON + mh
    widths = Growth.of(atmosphere, lines, vmic, None).widths(own)
    shift = Growth.of(atmosphere, lines, vmic, departures).abundances(widths) - own
    used = (widths > WEAKEST) & (widths < STRONGEST)
    neutral, low = lines.ion == "Fe I", lines.excitation_potential < 2.7
    groups = {"low": neutral & low, "high": neutral & ~low, "Fe I": neutral, "Fe II": ~neutral}
    return {name: float(np.nanmean(shift[used & group])) for name, group in groups.items()}


def with_classical_ionization(monkeypatch, factor: float) -> None:
    """Add ionization by hydrogen with the classical formula (Steenbock & Holweger 1984, A&A 130, 319) to the flows."""

    def flows(atom, gas, lte, recipe):
        total = collision_flows(atom, gas, lte, recipe)
        level, target = atom.continuum_level, atom.continuum_target
        threshold = atom.energy_ev[target] - atom.energy_ev[level]
        # oscillator strength of a continuum that falls as nu^-3: sigma nu / 2 over pi e^2 / m c
        strength = atom.continuum_sigma * LIGHT_SPEED_CM_S / atom.continuum_edge_cm / (2.0 * LINE_CROSS_SECTION)
        rate = factor * hydrogen_allowed(gas.temperature, threshold, strength, atom.mass) * gas.h1 * lte[level]
        for k in np.flatnonzero(atom.stage[level] == 0):
            total[:, level[k], target[k]] += rate[k]
            total[:, target[k], level[k]] += rate[k]
        return total

    monkeypatch.setattr(equilibrium, "collision_flows", flows)


@pytest.mark.parametrize("star", KORN)
def test_korn_shi_gehren_2003(star, figure, monkeypatch):
    """Their cases rerun with classical rates alone, as before computed ones existed. With S_H = 3 their corrections
    vanish only because the classical formula also ionizes by hydrogen; we take computed charge transfer instead."""
    theta, without, threefold = KORN[star]
    source = "Korn, Shi & Gehren 2003"
    ours = corrections(theta, Recipe(hydrogen_factor=0.0), drawin_only())["Fe I"]
    bound = corrections(theta, Recipe(hydrogen_factor=3.0), drawin_only())["Fe I"]
    frozen = corrections(theta)["Fe I"]
    with_classical_ionization(monkeypatch, 3.0)
    strong = corrections(theta, Recipe(hydrogen_factor=3.0), drawin_only())["Fe I"]
    figure(
        f"{star}, S_H = 0: ours {ours:+.3f}, theirs {without:+.2f}, difference", ours - without, "dex", source=source
    )
    figure(f"{star}, S_H = 3 with ionization by hydrogen: ours {strong:+.3f}, theirs {threefold:+.2f}, difference",
           strong - threefold, "dex", source=source)  # fmt: skip
    figure(f"{star}, S_H = 3 without ionization by hydrogen", bound, "dex")
    figure(f"{star}, recipe in use", frozen, "dex")
    assert abs(ours - without) < 0.08
    assert abs(strong - threefold) < 0.08
    assert strong < bound < ours + 0.03
    assert -0.02 < frozen < ours + 0.02


def test_the_sun_and_fe2(figure):
    """Asked: the Sun <= 0.03 dex; Fe II <= 0.02 dex (Mashonkina et al. 2019, abstract)."""
    for theta in ((5772.0, 4.44, 0.0, 1.0), (5750.0, 3.7, -2.4, 1.5), (4600.0, 1.4, -2.6, 1.8)):
        found = corrections(theta)
        figure(f"Fe II at {theta}", found["Fe II"], "dex", limit="0.02", source="Mashonkina et al. 2019, abstract")
        assert abs(found["Fe II"]) <= 0.02
        if theta[2] == 0.0:
            figure("Fe I of the Sun", found["Fe I"], "dex", limit="0.03")
            assert abs(found["Fe I"]) <= 0.03


def test_a_metal_poor_subgiant_and_its_recipe(figure):
    """Asked: +0.05 to +0.25. What the recipe does to it is the systematic error."""
    theta = (5750.0, 3.7, -2.4, 1.5)
    found = corrections(theta)
    figure("Fe I below 2.7 eV", found["low"], "dex", limit="+0.05 to +0.25")
    figure("Fe I above 2.7 eV", found["high"], "dex", limit="+0.05 to +0.25")
    assert 0.05 <= found["low"] <= 0.25
    assert 0.05 <= found["high"] <= 0.25
    others = {
        "S_H / 3": Recipe(hydrogen_factor=Recipe().hydrogen_factor / 3.0),
        "S_H x 3": Recipe(hydrogen_factor=Recipe().hydrogen_factor * 3.0),
        "photoionization x 10": Recipe(photoionization_factor=10.0),
        "electron collisions x 3": Recipe(electron_factor=3.0),
        "all hydrogen collisions x 3": Recipe(hydrogen_scale=3.0),
    }
    changes = {name: corrections(theta, recipe)["Fe I"] - found["Fe I"] for name, recipe in others.items()}
    for name, change in changes.items():
        figure(f"change of the Fe I correction with {name}", change, "dex")
    assert changes["S_H / 3"] > 0.0 > changes["S_H x 3"]
    assert changes["photoionization x 10"] > 0.0 > changes["all hydrogen collisions x 3"]


def test_trends(figure):
    """Corrections grow with Teff, with falling log g and falling [Fe/H] (Lind, Bergemann & Asplund 2012)."""
    points = {
        "reference 6000 / 4.0 / -2.0": (6000.0, 4.0, -2.0, 1.5),
        "cooler": (5000.0, 4.0, -2.0, 1.5),
        "lower gravity": (6000.0, 3.0, -2.0, 1.5),
        "metal-richer": (6000.0, 4.0, -1.0, 1.5),
        "metal-poorer": (6000.0, 4.0, -3.0, 1.5),
    }
    found = {name: corrections(theta)["Fe I"] for name, theta in points.items()}
    for name, value in found.items():
        figure(f"Fe I correction, {name}", value, "dex")
    reference = found["reference 6000 / 4.0 / -2.0"]
    assert found["cooler"] < reference < found["lower gravity"]
    assert found["metal-richer"] < reference < found["metal-poorer"]
