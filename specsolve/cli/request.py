"""What a solve was asked for, as plain values."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True, kw_only=True)
class Request:
    """What a solve was asked for, as plain values; its `arguments` go into the output.

    Attributes
    ----------
    treatment : str or None
        lte, nlte or both; None for the grid's default.
    loss : str
    columns, ions, units : dict
        Headings, spellings and units of the tables.
    limits : dict
        Line cuts by option name.
    reference : str or None
    at : dict or None
        Parameters of the reference star.
    fix : dict
        Parameter to value.
    at_errors : dict
        Their errors, where given.
    known : dict
        Parameter to (value, error).
    measured : dict
        Parallax, numax, colours, ... with their errors, by name.
    colour_scale : str or None
    alpha : float or None
        [alpha/Fe].
    outside : str or None
        Table of what is known of each star.
    wanted : tuple of str
        Names of stars; empty for all.
    grid_path, output, plots, plot_format, sheets, workers, scheduler
        Where things come from and go to.
    samples : int
        Joint samples a star.
    seed : int or None
        Of the samples.
    """

    treatment: str | None = None
    loss: str = "huber"
    columns: Mapping[str, str] = field(default_factory=dict)
    ions: Mapping[str, str] = field(default_factory=dict)
    units: Mapping[str, str] = field(default_factory=dict)
    limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    reference: str | None = None
    at: Mapping[str, float] | None = None
    fix: Mapping[str, float] = field(default_factory=dict)
    at_errors: Mapping[str, float] = field(default_factory=dict)
    known: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    measured: Mapping[str, float] = field(default_factory=dict)
    colour_scale: str | None = None
    alpha: float | None = None
    outside: str | None = None
    wanted: tuple[str, ...] = ()
    grid_path: str | None = None
    output: str | None = None
    plots: str | None = None
    plot_format: str = "pdf"
    sheets: bool | None = None
    workers: int = 1
    scheduler: str | None = None
    samples: int = 0
    seed: int | None = None

    def arguments(self) -> dict[str, Any]:
        """What decides the numbers, ready for JSON."""
        return {
            "treatment": self.treatment,
            "loss": self.loss,
            "columns": dict(self.columns),
            "ions": dict(self.ions),
            "units": dict(self.units),
            "limits": {name: list(pair) for name, pair in self.limits.items()},
            "reference": self.reference,
            "reference_parameters": dict(self.at) if self.at else None,
            "reference_errors": dict(self.at_errors),
            "fix": dict(self.fix),
            "known": {name: list(pair) for name, pair in self.known.items()},
            "measured": dict(self.measured),
            "colour_scale": self.colour_scale,
            "alpha": self.alpha,
            "stars": list(self.wanted),
            "samples": self.samples,
            "seed": self.seed,
        }

    @classmethod
    def from_arguments(cls, arguments: Mapping[str, Any], **delivery: Any) -> Request:
        """Inverse of `arguments`; headings and units of the first tables are not needed again."""
        return cls(
            treatment=arguments["treatment"],
            loss=arguments["loss"],
            limits={name: tuple(pair) for name, pair in arguments["limits"].items()},
            reference=arguments["reference"],
            at=arguments["reference_parameters"],
            at_errors=arguments["reference_errors"],
            measured=arguments["measured"],
            colour_scale=arguments["colour_scale"],
            alpha=arguments["alpha"],
            fix=arguments["fix"],
            known={name: tuple(pair) for name, pair in arguments["known"].items()},
            samples=arguments.get("samples", 0),
            seed=arguments.get("seed"),
            **delivery,
        )
