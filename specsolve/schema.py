"""Every table that specsolve reads or writes: name, type, unit and meaning of each column.

This one description makes the written tables, the keys of the JSON view, the column list in the help texts, and the
check of a table that is read back.  Columns and keys are only ever added; a change of meaning raises `SCHEMA`.
"""

from __future__ import annotations

from specsolve.schema_parts import COUNT, FLAG, PARAMETERS, REAL, RESIDUALS, STAR_KEY, TEXT, Column
from specsolve.schema_uses import TABLES as TABLES_OF_USES

SCHEMA = 1

SHIFTS = (("teff", "100 K"), ("logg", "0.3 dex"), ("feh", "0.2 dex"), ("vmic", "0.2 km/s"))


def _parameter_columns() -> tuple[Column, ...]:
    columns = []
    for name, unit, words in PARAMETERS:
        columns += [
            Column(name, REAL, unit, words),
            Column(f"{name}_error_star", REAL, unit, f"{words}: error from the star's own widths and line scatter"),
            Column(f"{name}_error_list", REAL, unit, f"{words}: error shared by all stars on this line list"),
        ]
    return tuple(columns)


def _residual_columns() -> tuple[Column, ...]:
    columns = []
    for name, unit, words in RESIDUALS:
        columns += [
            Column(name, REAL, unit, words),
            Column(f"{name}_error", REAL, unit, f"error of the {name.replace('_', ' ')}"),
        ]
    return tuple(columns)


def _ion_columns() -> tuple[Column, ...]:
    columns = []
    for prefix, ion in (("fe1", "Fe I"), ("fe2", "Fe II")):
        columns += [
            Column(f"{prefix}_abundance", REAL, "dex", f"weighted mean A(Fe) of {ion}"),
            Column(f"{prefix}_error_star", REAL, "dex", f"its error at fixed parameters, from the star ({ion})"),
            Column(f"{prefix}_error_list", REAL, "dex", f"its error at fixed parameters, from the list ({ion})"),
            Column(f"{prefix}_scatter", REAL, "dex", f"weighted standard deviation of single lines of {ion}"),
            Column(f"{prefix}_line_to_line", REAL, "dex", f"line-to-line term in the weights of {ion}"),
            Column(f"{prefix}_n_lines", COUNT, "", f"lines of {ion} that carry weight"),
            Column(f"{prefix}_feh", REAL, "dex", f"[Fe/H] of {ion} on the zero points of this solve"),
            Column(f"{prefix}_feh_solar_iron", REAL, "dex", f"A({ion}) minus solar iron"),
            Column(f"{prefix}_own_sun", REAL, "dex", f"A({ion}) of the Sun from the same lines and treatment"),
            Column(f"{prefix}_own_sun_n_lines", COUNT, "", f"lines of {ion} in that solar value"),
            Column(f"{prefix}_feh_own_sun", REAL, "dex", f"A({ion}) minus that solar value"),
        ]
    return tuple(columns)


def _sensitivity_columns() -> tuple[Column, ...]:
    columns = []
    for name, shift in SHIFTS:
        for sign, word in (("plus", "+"), ("minus", "-")):
            for prefix, ion in (("fe1", "Fe I"), ("fe2", "Fe II")):
                columns.append(
                    Column(f"d_{prefix}_{name}_{sign}", REAL, "dex", f"change of A({ion}) for {name} {word} {shift}")
                )
    return tuple(columns)


def _alternative_columns() -> tuple[Column, ...]:
    return tuple(
        Column(f"fe2_alternative_{name}", REAL, unit, f"{words}, with the other Fe II log gf scale")
        for name, unit, words in PARAMETERS
    )


STARS = (
    *STAR_KEY,
    Column("status", TEXT, "", "solved, tied, outside_grid or unsolved"),
    Column("reason", TEXT, "", "why it is not solved; empty otherwise"),
    Column("flags", TEXT, "", "informative flags, separated by commas"),
    *_parameter_columns(),
    Column("fixed", TEXT, "", "parameters held fixed, separated by commas"),
    Column(
        "outside_share", REAL, "", "share of outside knowledge in (teff, logg, feh, vmic): 0 lines alone, 1 fixed", (4,)
    ),
    Column("alpha", REAL, "dex", "[alpha/Fe] of the atmosphere: as given, else the law's at this metallicity"),
    Column("alpha_given", FLAG, "", "alpha was given"),
    Column("cov_star", REAL, "", "covariance of (teff, logg, feh, vmic): the star's own part", (4, 4)),
    Column("cov_list", REAL, "", "covariance of (teff, logg, feh, vmic): shared by all stars on the list", (4, 4)),
    *_residual_columns(),
    Column("removed_residuals", TEXT, "", "residuals that fixed parameters took out of the solve"),
    Column("residual_covariance", REAL, "", "covariance of the four residuals, in the order of their columns", (4, 4)),
    Column("chi2", REAL, "", "sum of squares of the whitened residuals and outside terms"),
    Column("log_likelihood", REAL, "", "ln density of the measured widths"),
    Column("degrees_of_freedom", COUNT, "", "lines used minus free parameters"),
    Column("line_scatter", REAL, "dex", "weighted standard deviation of all used lines"),
    *_ion_columns(),
    *_sensitivity_columns(),
    *_alternative_columns(),
    Column("n_candidates", COUNT, "", "minima found in the search"),
    Column("n_input", COUNT, "", "lines in the input"),
    Column("n_matched", COUNT, "", "of these, in the grid"),
    Column("n_used", COUNT, "", "of these, in the solve"),
    Column("solar_iron", REAL, "dex", "A(Fe) of the Sun used as zero of [Fe/H]"),
    Column("zero_point_source", TEXT, "", "what the abundances are relative to"),
    Column("fe2_scale", TEXT, "", "Fe II log gf scale in use"),
    Column("validity", TEXT, "", "limits of validity that apply to this star"),
    Column("notes", TEXT, "", "what the reader should know: assumed errors, merged repeats"),
    Column("unmatched", TEXT, "", "lines of the input that the grid does not have"),
    Column("grid_identity", TEXT, "", "SHA-256 of the response grid"),
    Column("atmospheres_identity", TEXT, "", "SHA-256 of the atmospheres behind the grid"),
    Column("line_list_hash", TEXT, "", "SHA-256 of the lines used"),
    Column("input_hash", TEXT, "", "SHA-256 of the star's input"),
    Column("outside", TEXT, "", "what was known from elsewhere, as JSON: name, mean, sigma, source"),
    Column("known", TEXT, "", "what the input said of the star beside its lines, as JSON"),
    Column("systematics", TEXT, "", "shift of (teff, logg, feh, vmic) for each systematic term, as JSON"),
    Column("configuration", TEXT, "", "options of this solve as JSON"),
)

LINES = (
    *STAR_KEY,
    Column("key", TEXT, "", "name of the line in the grid; empty if it is not there"),
    Column("wavelength_air", REAL, "Angstrom", "wavelength in air"),
    Column("ion", TEXT, "", "Fe I or Fe II"),
    Column("excitation_potential", REAL, "eV", "energy of the lower level"),
    Column("log_gf", REAL, "dex", "log10 of g f used"),
    Column("log_gf_error", REAL, "dex", "its error; nan where the source gives none"),
    Column("equivalent_width", REAL, "mAngstrom", "measured equivalent width"),
    Column("equivalent_width_error", REAL, "mAngstrom", "its error"),
    Column("error_assumed", FLAG, "", "the error was assumed, not given"),
    Column("reduced_width", REAL, "dex", "log10 of measured width over wavelength"),
    Column("predicted_width", REAL, "mAngstrom", "width predicted by the solution"),
    Column("predicted_reduced_width", REAL, "dex", "log10 of predicted width over wavelength; the cuts act on it"),
    Column("strength", REAL, "dex", "strength axis of the trend: measured and predicted reduced width, mixed"),
    Column("abundance", REAL, "dex", "A(Fe) of the line at the solution"),
    Column("abundance_error", REAL, "dex", "its error: width, log gf and line-to-line term"),
    Column("width_error_dex", REAL, "dex", "the part of it from the width"),
    Column("zero_point", REAL, "dex", "zero point subtracted"),
    Column("relative_abundance", REAL, "dex", "abundance minus zero point"),
    Column("deviation", REAL, "dex", "relative abundance minus the fitted plane or mean"),
    Column("standardized", REAL, "", "deviation over abundance_error"),
    Column("robust_weight", REAL, "", "1 full weight, less down-weighted, 0 not used"),
    Column("weight", REAL, "", "weight in the fit [dex^-2]; 0 where not used"),
    Column("d_abundance_teff", REAL, "dex / K", "change of the abundance with teff at fixed width"),
    Column("d_abundance_logg", REAL, "", "change of the abundance with logg at fixed width [dex/dex]"),
    Column("d_abundance_mh", REAL, "", "change of the abundance with the atmosphere's [Fe/H] [dex/dex]"),
    Column("d_abundance_vmic", REAL, "dex s / km", "change of the abundance with vmic at fixed width"),
    Column("d_abundance_d_width", REAL, "", "change of the abundance with log10 of the width [dex/dex]"),
    *(
        Column(f"influence_{name}", REAL, unit, f"change of {name} when this line alone is left out")
        for name, unit, _ in PARAMETERS
    ),
    Column("used", FLAG, "", "the line carries weight"),
    Column("reason", TEXT, "", "why it was dropped or down-weighted"),
    Column("interpolation_flags", COUNT, "", "bits: 1 edge, 2 beside a missing node, 4 outside the table, 8 missing"),
)

CANDIDATES = (
    *STAR_KEY,
    Column("candidate", COUNT, "", "place in the report; 0 is the reported one"),
    *(
        column
        for name, unit, words in PARAMETERS
        for column in (
            Column(name, REAL, unit, words),
            Column(f"{name}_error", REAL, unit, f"{words}: error, star and list together"),
        )
    ),
    Column("covariance", REAL, "", "covariance of (teff, logg, feh, vmic), star and list together", (4, 4)),
    *(Column(name, REAL, unit, words) for name, unit, words in RESIDUALS),
    Column("chi2", REAL, "", "sum of squares of the whitened residuals and outside terms"),
    Column("log_likelihood", REAL, "", "ln density of the measured widths"),
    Column("delta", REAL, "", "2 (ln L of the best - ln L)"),
    Column("odds", REAL, "", "share of the probability among near-equal candidates"),
    Column("n_lines", COUNT, "", "lines that carry weight"),
    Column("n_seeds", COUNT, "", "starting points that led here"),
    Column("iterations", COUNT, "", "steps of the refinement"),
    Column("flags", TEXT, "", "flags, separated by commas"),
    Column("set_aside", TEXT, "", "why the rule does not consider it; empty if it does"),
)

DECISIONS = (
    *STAR_KEY,
    Column("step", COUNT, "", "order of the decisions"),
    Column("kind", TEXT, "", "kind of decision"),
    Column("subject", TEXT, "", "candidate, line or parameter concerned"),
    Column("value", REAL, "", "the number compared"),
    Column("threshold", REAL, "", "its limit"),
    Column("outcome", TEXT, "", "what was done"),
    Column("reason", TEXT, "", "one sentence"),
)

DIFFERENCES = (
    Column("star", TEXT, "", "name of the star"),
    Column("lte_status", TEXT, "", "status of the LTE row"),
    Column("nlte_status", TEXT, "", "status of the NLTE row"),
    *(
        item
        for name, unit, words in PARAMETERS
        for item in (
            Column(f"{name}_difference", REAL, unit, f"{words}: NLTE minus LTE"),
            Column(f"{name}_difference_error", REAL, unit, "its error from the lines, which are the same in both"),
        )
    ),
    *(
        Column(f"{name}_difference", REAL, unit, f"{words}: NLTE minus LTE, each at its own parameters")
        for name, unit, words in RESIDUALS
    ),
    Column("fe1_abundance_difference", REAL, "dex", "mean A(Fe) of Fe I: NLTE minus LTE, each at its own parameters"),
    Column("fe2_abundance_difference", REAL, "dex", "mean A(Fe) of Fe II: NLTE minus LTE, each at its own parameters"),
    Column("n_common_lines", COUNT, "", "lines with weight in both"),
)

INPUT = (
    Column("star", TEXT, "", "name of the star (optional; one star if absent)"),
    Column("wavelength_air", REAL, "Angstrom", "wavelength in air"),
    Column("ion", TEXT, "", 'ion, as "Fe I" or "Fe II"'),
    Column("equivalent_width", REAL, "mAngstrom", "measured equivalent width"),
    Column("equivalent_width_error", REAL, "mAngstrom", "its error (optional; an assumed error is printed)"),
    Column("excitation_potential", REAL, "eV", "energy of the lower level (optional; identifies the line)"),
    Column("log_gf", REAL, "dex", "log10 of g f (optional; overrides the grid's)"),
    Column("log_gf_error", REAL, "dex", "its error (optional)"),
    Column("use", FLAG, "", "false leaves the line out (optional)"),
)


def _outside_columns() -> tuple[Column, ...]:
    columns = [Column("star", TEXT, "", "name of the star; empty or * for all stars")]
    for name, unit, words in PARAMETERS:
        columns += [
            Column(f"fix_{name}", REAL, unit, f"{words}, held fixed"),
            Column(f"prior_{name}", REAL, unit, f"{words}, known from elsewhere"),
            Column(f"prior_{name}_error", REAL, unit, f"error of prior_{name}"),
        ]
    columns += [
        Column("prior_covariance", REAL, "", "of the prior (teff, logg, feh, vmic), instead of their errors", (4, 4)),
        Column("alpha", REAL, "dex", "[alpha/Fe] of the star; the law of the atmospheres if not given"),
    ]
    for name, unit, words in MEASURED:
        columns += [Column(name, REAL, unit, words), Column(f"{name}_error", REAL, unit, f"error of {name}")]
    columns.append(Column("colour_scale", TEXT, "", "relation for the colours: dwarfs (and subgiants) or giants"))
    return tuple(columns)


MEASURED = (
    ("parallax", "mas", "parallax; with magnitude and mass it gives logg as a function of teff"),
    ("mass", "solMass", "mass of the star"),
    ("magnitude_v", "mag", "apparent V"),
    ("magnitude_g", "mag", "apparent Gaia G"),
    ("magnitude_bolometric", "mag", "apparent bolometric magnitude, free of extinction"),
    ("reddening", "mag", "E(B-V); needed with magnitudes and colours"),
    ("numax", "uHz", "frequency of maximum power of solar-like oscillations; gives logg"),
    ("colour_b_v", "mag", "B-V; colours give teff as a function of feh"),
    ("colour_v_j", "mag", "V-J (2MASS)"),
    ("colour_v_h", "mag", "V-H (2MASS)"),
    ("colour_v_ks", "mag", "V-Ks (2MASS)"),
    ("colour_j_ks", "mag", "J-Ks (2MASS)"),
)
OUTSIDE = _outside_columns()

TRUTH = (
    Column("star", TEXT, "", "name of the invented star"),
    *(Column(name, REAL, unit, words) for name, unit, words in PARAMETERS),
    Column("signal_to_noise", REAL, "", "of the invented spectrum, per pixel"),
    Column("bad_lines", TEXT, "", "lines spoiled on purpose, separated by semicolons"),
)

MEASUREMENTS = (
    Column("star", TEXT, "", "name of the star"),
    Column("wavelength_air", REAL, "Angstrom", "wavelength in air, of the line list"),
    Column("ion", TEXT, "", "Fe I or Fe II"),
    Column("excitation_potential", REAL, "eV", "energy of the lower level"),
    Column("log_gf", REAL, "dex", "log10 of g f of the line list"),
    Column("equivalent_width", REAL, "mAngstrom", "measured equivalent width; nan where the line is not covered"),
    Column("equivalent_width_error", REAL, "mAngstrom", "its error: noise, continuum and blends together"),
    Column("noise_error", REAL, "mAngstrom", "part of the error from the noise"),
    Column("continuum_error", REAL, "mAngstrom", "part from the continuum, common to the lines of a continuum_group"),
    Column("blend_error", REAL, "mAngstrom", "part from neighbours"),
    Column("continuum_group", COUNT, "", "lines of one number share their continuum; -1 for none"),
    Column("use", FLAG, "", "good enough for a solve"),
    Column("flags", TEXT, "", "what is wrong with the line, separated by commas"),
    Column("upper_limit", REAL, "mAngstrom", "three sigma upper limit"),
    Column("integrated_width", REAL, "mAngstrom", "width by direct integration, neighbours taken out"),
    Column("predicted_width", REAL, "mAngstrom", "width expected beforehand for the guess of the star"),
    Column("depth", REAL, "", "central depth of the line"),
    Column("line_fwhm", REAL, "km / s", "full width at half depth of the fitted line"),
    Column("line_shift", REAL, "km / s", "fitted centre minus listed wavelength"),
    Column("reduced_chi2", REAL, "", "reduced chi square of the fit"),
    Column("order", COUNT, "", "order of the spectrum, from 0; -1 for none"),
)

SPECTRA = (
    Column("star", TEXT, "", "name of the star"),
    Column("file", TEXT, "", "name of the file"),
    Column("status", TEXT, "", "measured or failed"),
    Column("reason", TEXT, "", "why it failed"),
    Column("velocity", REAL, "km / s", "velocity taken out of the wavelengths, positive when receding"),
    Column("velocity_error", REAL, "km / s", "its error"),
    Column("velocity_significance", REAL, "", "peak of the cross-correlation over its scatter elsewhere"),
    Column("barycentric_correction", REAL, "km / s", "velocity of the observatory to be added; nan if not asked for"),
    Column("vacuum_share", REAL, "", "drift of the velocity in units of what air and vacuum mixed up would do"),
    Column("vacuum_share_error", REAL, "", "its error"),
    Column("air_or_vacuum", TEXT, "", "how the wavelengths were understood"),
    Column("signal_to_noise", REAL, "", "per pixel, median"),
    Column("noise_source", TEXT, "", "where the errors of the pixels come from"),
    Column("resolving_power", REAL, "", "of the header or said; nan if unknown"),
    Column("broadening", REAL, "km / s", "full width at half maximum common to all lines, rotation not counted"),
    Column("broadening_error", REAL, "km / s", "its error"),
    Column("rotation", REAL, "km / s", "v sin i where it was fitted"),
    Column("n_orders", COUNT, "", "orders of the spectrum"),
    Column("n_lines", COUNT, "", "lines of the list"),
    Column("n_measured", COUNT, "", "of these, with a width"),
    Column("n_use", COUNT, "", "of these, good enough for a solve"),
    Column("guess_teff", REAL, "K", "star for which the lines were predicted: effective temperature"),
    Column("guess_logg", REAL, "dex", "gravity of that star"),
    Column("guess_feh", REAL, "dex", "[Fe/H] of that star"),
    Column("guess_vmic", REAL, "km / s", "microturbulence of that star"),
    Column("guess_source", TEXT, "", "said, default, or how many times the widths were solved for it"),
    Column("notes", TEXT, "", "what was decided on the way"),
)

SAMPLES = (
    *STAR_KEY,
    Column("sample", COUNT, "", "number of the sample"),
    Column("candidate", COUNT, "", "the candidate that it belongs to, as in the candidates table"),
    *(Column(name, REAL, unit, words) for name, unit, words in PARAMETERS),
    Column("log_density", REAL, "", "ln of the density about the own candidate; 0 at the candidate"),
)

MAP = (
    *STAR_KEY,
    Column("teff", REAL, "K", "effective temperature of the point"),
    Column("logg", REAL, "dex", "gravity of the point"),
    Column("objective", REAL, "", "sum of squares of whitened residuals and outside terms, least over feh and vmic"),
    Column("feh", REAL, "dex", "[Fe/H] where it is least"),
    Column("vmic", REAL, "km / s", "microturbulence where it is least"),
    Column("excitation_slope", REAL, "dex / eV", "slope of A(Fe I) against excitation potential that stays there"),
    Column("ionization_offset", REAL, "dex", "mean A(Fe I) - mean A(Fe II) that stays there"),
)

TABLES: dict[str, tuple[Column, ...]] = {
    "stars": STARS,
    "lines": LINES,
    "candidates": CANDIDATES,
    "decisions": DECISIONS,
    "differences": DIFFERENCES,
    "input": INPUT,
    "outside": OUTSIDE,
    "truth": TRUTH,
    "measurements": MEASUREMENTS,
    "spectra": SPECTRA,
    "samples": SAMPLES,
    "map": MAP,
    **TABLES_OF_USES,
}

FILE_ENDINGS = {"stars": "", "lines": "_lines", "candidates": "_candidates", "decisions": "_decisions"}

EXTRA_ENDINGS = {"samples": "_samples", "map": "_map"}  # written where they were asked for


def columns_of(kind: str) -> tuple[Column, ...]:
    """Columns of a kind of table.

    Examples
    --------
    >>> [column.name for column in columns_of("decisions")][:3]
    ['star', 'treatment', 'step']
    """
    return TABLES[kind]


def describe(kind: str) -> str:
    """The columns of a kind of table as aligned text, one a line.

    Examples
    --------
    >>> describe("input").splitlines()[1]
    'wavelength_air          Angstrom   wavelength in air'
    """
    columns = columns_of(kind)
    width = max(len(column.name) for column in columns) + 2
    unit_width = max(len(column.unit) for column in columns) + 2
    return "\n".join(f"{column.name:<{width}}{column.unit:<{unit_width}}{column.description}" for column in columns)
