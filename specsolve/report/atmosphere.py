"""One atmosphere as a table and as a picture."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from specsolve.atmosphere.model import Atmosphere
from specsolve.errors import UsageError

if TYPE_CHECKING:
    from astropy.table import QTable


def structure_table(model: Atmosphere, identity: str = "") -> QTable:
    """The structure as a QTable that `specsolve atmosphere import` reads back.

    Parameters
    ----------
    model : Atmosphere
    identity : str
        Identity of the store it comes from, kept in the metadata.

    Returns
    -------
    QTable
        log_tau, column_mass, temperature, gas_pressure, electron_number_density, with units.
    """
    from astropy import units as u
    from astropy.table import QTable

    from specsolve import __version__

    table = QTable(
        {
            "log_tau": model.log_tau * u.dimensionless_unscaled,
            "column_mass": model.column_mass * u.g / u.cm**2,
            "temperature": model.temperature * u.K,
            "gas_pressure": model.gas_pressure * u.dyn / u.cm**2,
            "electron_number_density": model.electron_density / u.cm**3,
        }
    )
    table["log_tau"].info.format = ".3f"
    table["temperature"].info.format = ".1f"
    for name in ("column_mass", "gas_pressure", "electron_number_density"):
        table[name].info.format = ".5e"
    table.meta = {
        "teff": model.teff, "logg": model.logg, "mh": model.mh, "alpha": float(model.alpha), "vmic": float(model.vmic),
        "status": model.status, "flux_error": model.flux_error, "atmospheres": identity, "specsolve": __version__,
        "log_tau": "log10 of the continuum optical depth at 5000 A",
    }  # fmt: skip
    return table


def draw_atmosphere(model: Atmosphere, path: Path) -> None:
    """Draw temperature, and both pressures, against optical depth.

    Raises
    ------
    specsolve.errors.UsageError
        matplotlib is not installed.
    """
    from specsolve.constants import BOLTZMANN_ERG_K

    try:
        from matplotlib.figure import Figure
    except ImportError as error:
        raise UsageError("figures need matplotlib: pip install 'specsolve[plots]'") from error
    figure = Figure(figsize=(7.0, 6.0), layout="constrained")
    warm, press = figure.subplots(2, 1, sharex=True)
    warm.plot(model.log_tau, model.temperature, color="black")
    warm.axhline(model.teff, color="0.6", linewidth=0.8)
    warm.annotate(f"Teff {model.teff:g} K", (model.log_tau[0], model.teff), va="bottom", color="0.4")
    warm.set_ylabel("temperature [K]")
    warm.set_title(f"Teff {model.teff:g} K   log g {model.logg:g}   [M/H] {model.mh:+g}")
    electrons = model.electron_density * BOLTZMANN_ERG_K * model.temperature
    for values, name, style in ((model.gas_pressure, "gas", "-"), (electrons, "electrons", "--")):
        press.semilogy(model.log_tau, values, style, color="black", label=name)
    press.set_ylabel("pressure [dyn / cm$^2$]")
    press.set_xlabel(r"log $\tau$ (continuum, 5000 A)")
    press.legend(frameon=False)
    figure.savefig(path)
