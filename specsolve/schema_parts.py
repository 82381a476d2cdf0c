"""What descriptions of tables are made of: a column, its types, the parameters and the residuals."""

from __future__ import annotations

from dataclasses import dataclass

TEXT = "str"
REAL = "float64"
COUNT = "int64"
FLAG = "bool"


@dataclass(frozen=True)
class Column:
    """One column of a table.

    Attributes
    ----------
    name : str
    dtype : str
        "str", "float64", "int64" or "bool".
    unit : str
        As astropy writes it; empty for none.
    description : str
    shape : tuple of int
        Of one cell; empty for a scalar.
    """

    name: str
    dtype: str
    unit: str
    description: str
    shape: tuple[int, ...] = ()


PARAMETERS = (
    ("teff", "K", "effective temperature"),
    ("logg", "dex", "log10 of the surface gravity in cm/s2"),
    ("feh", "dex", "[Fe/H] on the zero points of this solve"),
    ("vmic", "km / s", "microturbulence"),
)
RESIDUALS = (
    ("excitation_slope", "dex / eV", "slope of A(Fe I) against the lower excitation potential"),
    ("ionization_offset", "dex", "mean A(Fe I) - mean A(Fe II)"),
    ("metallicity_offset", "dex", "mean A(Fe) - zero point - [Fe/H] of the atmosphere"),
    ("strength_slope", "", "slope of A(Fe I) against the reduced width [dex/dex]"),
)

STAR_KEY = (
    Column("star", TEXT, "", "name of the star"),
    Column("treatment", TEXT, "", "line formation: lte or nlte"),
)
