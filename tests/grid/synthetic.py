"""A response grid with a known truth: smooth, made-up formulas with the signs and sizes of a real curve of growth.

Invented for tests, not physics to rely on: a one-layer star. The number of absorbers follows Saha and Boltzmann factors
at 0.87 Teff, the continuum is that of H- (proportional to the electron pressure), the electron pressure is a smooth law
of teff, gravity and metallicity. So Fe I lines weaken with teff, Fe II lines with gravity, strong lines saturate and
feel vmic.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC, UNITS, Axis
from specsolve.grid.codes import MISSING, encode
from specsolve.grid.store import ResponseGrid
from specsolve.grid.write import write_grid
from specsolve.lines import LineList

TEFF = np.arange(4000.0, 7001.0, 250.0)
LOGG = np.arange(0.0, 5.01, 0.5)
MH = np.arange(-3.0, 0.51, 0.5)


def synthetic_lines(n_fe1: int = 60, n_fe2: int = 12, seed: int = 1) -> LineList:
    """Invented Fe I and Fe II lines whose widths at solar parameters spread over -6.2 .. -4.6 in log10(W/lambda)."""
    rng = np.random.default_rng(seed)
    n = n_fe1 + n_fe2
    ion = np.array(["Fe I"] * n_fe1 + ["Fe II"] * n_fe2)
    wavelength = np.sort(rng.uniform(4800.0, 6800.0, n))
    rng.shuffle(wavelength)
    potential = np.where(ion == "Fe I", rng.uniform(0.0, 5.0, n), rng.uniform(2.8, 3.9, n))
    plain = LineList.from_arrays(wavelength, ion, potential, np.zeros(n))
    log_gf = rng.uniform(-6.6, -4.8, n) - weak_line(plain, 5772.0, 4.44, 0.0, 0.0)
    return LineList.from_arrays(wavelength, ion, potential, log_gf, log_gf_error=np.full(n, 0.05)).sorted()


def weak_line(lines: LineList, teff, logg, mh, dA):
    """log10(W/lambda) of the line if it were weak; broadcasts teff, logg, mh, dA against a last axis of lines."""
    temperature = 0.87 * teff
    theta = 5040.0 / temperature
    electrons = (
        1.1 + 0.35 * (logg - 4.44) + 0.30 * (np.sqrt((mh + 3.6) ** 2 + 0.3) - 3.65) + 4.5 * (1.0 - 5772.0 / teff)
    )
    saha = 2.5 * np.log10(temperature) - 7.9 * theta - 0.48 - electrons + 0.3  # log N(Fe II)/N(Fe I)
    neutral = -np.log10(1.0 + 10.0**saha)
    fraction = np.where(lines.ion == "Fe I", neutral, neutral + saha)
    continuum = electrons + 2.5 * np.log10(theta) + 0.754 * theta
    return (
        lines.log_gf + np.log10(lines.wavelength_air * 1e-8) + SOLAR_IRON + mh + dA - 4.4
        - theta * lines.excitation_potential + fraction - continuum
    )  # fmt: skip


def synthetic_log_widths(lines: LineList, teff, logg, mh, vmic, dA) -> np.ndarray:
    """The truth: log10(W/lambda), parameters broadcast against a last axis of lines."""
    teff, logg, mh, vmic, dA = (np.asarray(v, dtype=np.float64)[..., None] for v in (teff, logg, mh, vmic, dA))
    doppler = np.sqrt(2 * 1.380649e-16 * 0.87 * teff / (55.845 * 1.66054e-24) + (vmic * 1e5) ** 2) / 2.9979e10
    strength = 10.0 ** weak_line(lines, teff, logg, mh, dA) / (np.sqrt(np.pi) * doppler)
    linear = np.sqrt(np.pi) * strength
    flat = 2.0 * np.sqrt(np.log1p(strength))
    damped = 0.10 * 10.0 ** (0.15 * (logg - 4.44)) * np.sqrt(strength)
    core = linear * flat / np.sqrt(linear**2 + flat**2)
    return np.log10(doppler * np.sqrt(core**2 + (damped * strength / (1.0 + strength)) ** 2))


def synthetic_grid(
    tmp_path: Path,
    lines: LineList | None = None,
    *,
    teff=TEFF,
    logg=LOGG,
    mh=MH,
    vmic=DEFAULT_VMIC,
    dA=DEFAULT_DA,
    missing: tuple[tuple[float, float, float], ...] | None = None,
    name: str = "synthetic_grid",
) -> ResponseGrid:
    """Write the grid of these formulas and open it.

    Parameters
    ----------
    missing : tuple of (teff, logg, mh), optional
        Nodes left out; by default logg 0.0 above 5000 K, as on the default axes.
    """
    lines = synthetic_lines() if lines is None else lines
    axes = {"teff": teff, "logg": logg, "mh": mh, "vmic": vmic, "dA": dA}
    values = [np.asarray(v, dtype=np.float64) for v in axes.values()]
    widths = synthetic_log_widths(lines, *np.meshgrid(*values, indexing="ij"))  # (teff, logg, mh, vmic, dA, line)
    codes = encode(np.moveaxis(widths, -1, 3))
    reasons = {}
    for node in np.ndindex(codes.shape[:3]):
        at = tuple(float(values[k][node[k]]) for k in range(3))
        if (missing is None and at[1] == 0.0 and at[0] > 5000.0) or (missing is not None and at in missing):
            codes[node] = MISSING
            reasons[node] = "left out of the synthetic grid"
    write_grid(
        Path(tmp_path) / name,
        {"lte": codes},
        lines,
        node_axes=[Axis(n, UNITS[n], axes[n]) for n in ("teff", "logg", "mh")],
        line_axes=[Axis(n, UNITS[n], axes[n]) for n in ("vmic", "dA")],
        missing={"lte": reasons},
        atmospheres_identity="0" * 64,
        description="Invented responses for tests",
    )
    return ResponseGrid.open(Path(tmp_path) / name)
