"""Columns of the tables that ``crosscheck``, ``cluster`` and ``rehearse`` read and write."""

from __future__ import annotations

from specsolve.schema_parts import COUNT, FLAG, PARAMETERS, REAL, RESIDUALS, STAR_KEY, TEXT, Column


def _each(template: str, words: str, *, unit: bool = True) -> tuple[Column, ...]:
    """One column a parameter: `template` and `words` with {} for the name and its meaning."""
    return tuple(
        Column(template.format(name), REAL, of if unit else "", words.format(meaning))
        for name, of, meaning in PARAMETERS
    )


CAUSES = {
    "held_teff": "their teff came from elsewhere",
    "held_logg": "their logg came from elsewhere",
    "held_vmic": "their vmic came from elsewhere",
    "solar_iron": "another solar iron, as they state it",
    "zero_point": "another zero of [Fe/H]: a solar iron that they do not state, or a common shift of all log gf",
    "fe2_scale": "another log gf scale of Fe II (a common shift)",
    "treatment": "the other line formation (LTE, NLTE)",
}

PUBLISHED = (
    Column("star", TEXT, "", "name of the star; spaces, case and prefixes of catalogues do not matter"),
    *(
        column
        for name, unit, words in PARAMETERS
        for column in (
            Column(name, REAL, unit, f"{words} (vmic may be left out)"),
            Column(f"{name}_error", REAL, unit, f"its error, one sigma ({name}; optional)"),
        )
    ),
    Column("solar_iron", REAL, "dex", "A(Fe) of the Sun that [Fe/H] counts from (optional)"),
    Column("treatment", TEXT, "", "lte or nlte (optional)"),
)

CROSSCHECK = (
    *STAR_KEY,
    Column("published_star", TEXT, "", "its name in the published table"),
    Column("status", TEXT, "", "compared, or why not"),
    *_each("{}", "{}, ours"),
    *_each("published_{}", "{}, published"),
    *_each("d_{}", "{}, published minus ours"),
    *_each("d_{}_error", "{}, error of that difference: our star and list parts and their error"),
    Column("difference_chi2", REAL, "", "of the whole difference, with its full covariance"),
    Column("difference_freedom", COUNT, "", "parameters compared"),
    Column("significance", REAL, "", "of the whole difference, in sigma of a normal distribution"),
    Column("significance_star", REAL, "", "the same without what all stars on one line list share"),
    *(
        column
        for name, unit, words in RESIDUALS
        for column in (
            Column(f"their_{name}", REAL, unit, f"{words}: of our lines at their parameters"),
            Column(f"their_{name}_sigma", REAL, "", f"the same in its own errors ({name})"),
        )
    ),
    Column("balance_significance", REAL, "", "how far their parameters are from balancing our lines, in sigma"),
    Column("broken", TEXT, "", "the balance that breaks most there"),
    Column("causes", TEXT, "", "causes named for the set, separated by commas"),
    *_each("remainder_{}", "{}: what the named causes leave of the difference"),
    Column("remainder_significance", REAL, "", "of the remainder, in sigma"),
)

CROSSCHECK_CAUSES = (
    *STAR_KEY,
    Column("cause", TEXT, "", "what was changed: " + "; ".join(f"{name}: {words}" for name, words in CAUSES.items())),
    Column("named", FLAG, "", "named for the set"),
    Column("amount", REAL, "", "size of the change: K, dex or km/s; nan for the other line formation"),
    *_each("alone_{}", "{}: change by this cause alone (for a scale that is not named: per 0.1 dex)"),
    *_each("share_{}", "{}: its share, averaged over the order of the named causes"),
    *_each("order_{}", "{}: by how much that share depends on the order (largest minus smallest)"),
    Column("reason", TEXT, "", "why it could not be computed"),
)

CROSSCHECK_SET = (
    Column("treatment", TEXT, "", "line formation of our results"),
    Column("parameter", TEXT, "", "teff, logg, feh or vmic"),
    Column("quantity", TEXT, "", "difference, or the remainder after the named causes"),
    Column("n_stars", COUNT, "", "stars compared"),
    Column("zero_point", REAL, "", "robust mean of published minus ours, in the unit of the parameter"),
    Column("zero_point_error", REAL, "", "its error from the stars"),
    Column("zero_point_error_list", REAL, "", "its error from our line list, counted once"),
    Column("scatter", REAL, "", "robust standard deviation"),
    Column("scatter_beyond", REAL, "", "the part of it that the errors do not explain"),
    *(
        column
        for name, unit, _ in PARAMETERS
        for column in (
            Column(f"slope_{name}", REAL, "", f"trend of the difference with {name} (mean of both sides), per {unit}"),
            Column(f"slope_{name}_error", REAL, "", f"its error ({name})"),
        )
    ),
)

CROSSCHECK_VERDICTS = (
    Column("treatment", TEXT, "", "line formation of our results"),
    Column("cause", TEXT, "", "as in the causes table; several joined by +"),
    Column("outcome", TEXT, "", "named, stated, not needed, rival (cannot be told apart) or not tested"),
    Column("evidence", REAL, "", "by how much -2 ln L, less the cost of free amplitudes, is better with it"),
    Column("amount", REAL, "", "fitted size in the set: mean of what was held, or shift of the scale"),
    Column("amount_error", REAL, "", "its error"),
    Column("amount_scatter", REAL, "", "scatter of what was held, between stars"),
    Column("error_factor", REAL, "", "by how much all errors had to grow (in variance)"),
    Column("words", TEXT, "", "what it means"),
)

SEQUENCE = (
    Column("teff", REAL, "K", "effective temperature of a point of a sequence"),
    Column("logg", REAL, "dex", "log10 of the surface gravity in cm/s2"),
)

HANDOFF = (
    *STAR_KEY,
    Column("status", TEXT, "", "solved or tied"),
    Column("flags", TEXT, "", "informative flags, separated by commas"),
    *_each("{}", "{}"),
    Column("cov_star", REAL, "", "covariance of (teff, logg, feh, vmic): the star's own part", (4, 4)),
    Column("cov_list", REAL, "", "covariance of (teff, logg, feh, vmic): the part shared by all rows", (4, 4)),
    Column("list_modes", REAL, "", "shared errors: row i and j have the list covariance list_modes_i list_modes_j^T"),
    Column("systematics", TEXT, "", "shift of (teff, logg, feh, vmic) for each systematic term, as JSON"),
    Column("member_probability", REAL, "", "that the star belongs to the cluster, by [Fe/H] alone"),
    Column("n_candidates", COUNT, "", "near-equal candidates; more than one for a tied star"),
    Column("candidate_odds", REAL, "", "probability of the reported candidate among them"),
    Column("feh_prior", REAL, "dex", "common [Fe/H] of the other members fed into this solution; nan if none was"),
    Column("feh_prior_error", REAL, "dex", "its standard deviation, with the intrinsic scatter"),
    *_each("before_{}", "{}: before that; the same if nothing was fed"),
    Column("sequence_distance", REAL, "", "distance from the nearest sequence in its own errors; nan without one"),
    Column("sequence", TEXT, "", "labels of that sequence"),
    Column("decided_by", TEXT, "", "what settled a tied star: metallicity, sequence, or nothing"),
)

HANDOFF_CANDIDATES = (
    *STAR_KEY,
    Column("candidate", COUNT, "", "as in the candidates table of the solve; 0 was reported there"),
    *_each("{}", "{}"),
    Column("cov_star", REAL, "", "covariance of (teff, logg, feh, vmic): the star's own part", (4, 4)),
    Column("odds_before", REAL, "", "odds of the solve"),
    Column("odds", REAL, "", "odds with what is known of the cluster"),
)

HANDOFF_SAMPLES = (
    *STAR_KEY,
    Column("sample", COUNT, "", "number of the draw; one number means one draw of the shared errors for all stars"),
    Column("candidate", COUNT, "", "candidate that this draw comes from"),
    *_each("{}", "{}"),
)

CLUSTER = (
    Column("treatment", TEXT, "", "line formation"),
    Column("n_stars", COUNT, "", "stars with parameters"),
    Column("n_members", REAL, "", "sum of the membership probabilities"),
    Column("feh", REAL, "dex", "common [Fe/H] of the members"),
    Column("feh_error_star", REAL, "dex", "its error from the stars"),
    Column("feh_error_list", REAL, "dex", "its error from the line list, counted once"),
    Column("intrinsic_scatter", REAL, "dex", "of [Fe/H] between members: median"),
    Column("intrinsic_scatter_limit", REAL, "dex", "95 % upper limit of it"),
    Column("field_share", REAL, "", "fraction of stars that do not belong"),
    Column("fed", FLAG, "", "the common [Fe/H] was fed into the stars' solutions"),
)

POINTS = (
    Column("point", TEXT, "", "name of the point (optional)"),
    *(Column(name, REAL, unit, f"true {words}") for name, unit, words in PARAMETERS),
    Column("signal_to_noise", REAL, "", "per pixel (optional; --signal-to-noise otherwise)"),
)

REHEARSAL = (
    Column("point", TEXT, "", "name of the point"),
    Column("truth_treatment", TEXT, "", "line formation that made the widths"),
    Column("treatment", TEXT, "", "line formation of the analysis"),
    Column("status", TEXT, "", "rehearsed, outside_grid, missing_node, no_vmic or too_few_lines"),
    Column("reason", TEXT, "", "why it could not be rehearsed"),
    *_each("{}", "true {}"),
    Column("signal_to_noise", REAL, "", "per pixel; nan for an error law"),
    Column("n_trials", COUNT, "", "trials"),
    Column("n_good", COUNT, "", "trials that were solved"),
    Column("fraction_tied", REAL, "", "of the trials that ended tied"),
    Column("fraction_outside", REAL, "", "of the trials that ended outside the grid or at a missing node"),
    Column("fraction_failed", REAL, "", "of the trials that ended without a solution for another reason"),
    Column(
        "fraction_wrong", REAL, "", "of the solved trials that are off by more than five of their errors in a parameter"
    ),
    Column("n_lines", REAL, "", "lines in the solves, mean"),
    *_each("recovered_{}", "{}: median of the solved trials"),
    *_each("bias_{}", "{}: median of solved minus true"),
    *_each("bias_{}_error", "{}: error of that bias from the number of trials"),
    *_each("scatter_{}", "{}: robust standard deviation over the trials"),
    *_each("error_{}", "{}: median error that the solves report, star and list"),
    *_each("error_star_{}", "{}: its star part"),
    *_each("coverage_{}", "{}: fraction of trials within one reported error of their median", unit=False),
    *_each("needed_{}", "{}: signal to noise for the wanted error; nan if the rest alone is larger", unit=False),
    Column("shift_fit_teff", REAL, "K", "shift of teff by the linear fit; nan without one"),
    Column("shift_fit_logg", REAL, "dex", "shift of logg by the linear fit"),
    Column("linear_fails", FLAG, "", "the point lies off a linear fit by more than its error allows"),
)

TABLES: dict[str, tuple[Column, ...]] = {
    "published": PUBLISHED,
    "crosscheck": CROSSCHECK,
    "crosscheck_causes": CROSSCHECK_CAUSES,
    "crosscheck_set": CROSSCHECK_SET,
    "crosscheck_verdicts": CROSSCHECK_VERDICTS,
    "cluster": CLUSTER,
    "handoff": HANDOFF,
    "handoff_candidates": HANDOFF_CANDIDATES,
    "handoff_samples": HANDOFF_SAMPLES,
    "sequence": SEQUENCE,
    "points": POINTS,
    "rehearsal": REHEARSAL,
}
