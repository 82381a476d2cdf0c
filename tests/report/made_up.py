"""A made-up `Solution`, complete and consistent enough to be written, printed and drawn; no star is meant."""

from __future__ import annotations

import numpy as np

from specsolve.balance.solution import (
    Candidate,
    Decision,
    IonAbundance,
    LineResults,
    Sensitivity,
    Solution,
    Trend,
)

N_FE1, N_FE2 = 42, 7


def made_up_solution(rng: np.random.Generator, star: str = "made-up", status: str = "solved") -> Solution:
    """A solution with 49 lines, four of them dropped, and two candidates."""
    n = N_FE1 + N_FE2
    ion = np.array(["Fe I"] * N_FE1 + ["Fe II"] * N_FE2)
    wavelength = np.concatenate([np.sort(rng.uniform(4800, 6800, N_FE1)), np.sort(rng.uniform(4800, 6500, N_FE2))])
    potential = np.where(ion == "Fe I", rng.uniform(0.1, 5.0, n), rng.uniform(2.8, 3.9, n))
    strength = rng.uniform(-5.9, -4.85, n)
    width = wavelength * 1e3 * 10**strength
    error = rng.uniform(0.05, 0.09, n)
    deviation = rng.normal(0, error)
    used = np.ones(n, bool)
    used[[3, 11, 30, N_FE1 + 2]] = False
    reason = np.where(used, "", "predicted_strength_cut")
    reason[30] = "not_in_grid"
    reason[7] = "down_weighted"
    weight = np.where(used, error**-2, 0.0)
    lines = LineResults(
        key=np.array([f"{i} {w:.3f} {e:.3f}" for i, w, e in zip(ion, wavelength, potential, strict=True)]),
        wavelength_air=wavelength,
        ion=ion,
        excitation_potential=potential,
        log_gf=rng.uniform(-5, -0.5, n),
        log_gf_error=np.where(rng.random(n) < 0.2, np.nan, 0.04),
        equivalent_width=width,
        equivalent_width_error=0.03 * width,
        error_assumed=np.zeros(n, bool),
        reduced_width=strength,
        predicted_width=width * 10 ** (-0.5 * deviation),
        predicted_reduced_width=strength - 0.5 * deviation,
        strength=strength,
        abundance=7.30 + deviation,
        abundance_error=error,
        width_error_dex=0.4 * error,
        zero_point=np.full(n, 7.46),
        relative_abundance=-0.16 + deviation,
        deviation=deviation,
        standardized=deviation / error,
        robust_weight=np.where(reason == "down_weighted", 0.4, used),
        weight=weight,
        d_abundance=np.column_stack(
            [
                np.where(ion == "Fe I", 8e-4 - 8e-5 * potential, -3e-4),
                np.where(ion == "Fe I", 0.0, 0.42),
                np.full(n, 0.1),
                -0.25 * (strength + 6.0),
            ]
        ),
        d_abundance_d_width=np.full(n, 1.4),
        influence=rng.normal(0, 1, (n, 4)) * [6.0, 0.012, 0.004, 0.01] * used[:, None],
        used=used,
        reason=reason,
        interpolation_flags=np.zeros(n, np.uint8),
    )
    fe1 = IonAbundance(
        ion="Fe I",
        abundance=7.302,
        error_star=0.011,
        error_list=0.007,
        scatter=0.07,
        line_to_line=0.04,
        n_lines=int(used[:N_FE1].sum()),
        feh=-0.158,
        feh_solar_iron=-0.158,
        own_sun=7.45,
        own_sun_n_lines=30,
        feh_own_sun=-0.148,
    )
    fe2 = IonAbundance(
        ion="Fe II",
        abundance=7.299,
        error_star=0.03,
        error_list=0.02,
        scatter=0.06,
        line_to_line=0.04,
        n_lines=int(used[N_FE1:].sum()),
        feh=-0.161,
        feh_solar_iron=-0.161,
        own_sun=np.nan,
        own_sun_n_lines=2,
        feh_own_sun=np.nan,
    )
    covariance = np.diag([32.0, 0.07, 0.03, 0.05]) ** 2
    covariance[0, 1] = covariance[1, 0] = 0.6 * 32.0 * 0.07
    parameters = np.array([5512.0, 4.31, -0.158, 0.93])

    def candidate(index: int, place: np.ndarray, delta: float) -> Candidate:
        return Candidate(
            index=index,
            parameters=place,
            covariance=covariance,
            residuals=np.array([1e-9, -2e-9, 1e-9, 3e-9]),
            chi2=1e-6,
            log_likelihood=41.2 - delta / 2,
            delta=delta,
            odds=1.0 if index == 0 else np.nan,
            n_lines=int(used.sum()),
            n_seeds=12,
            flags=(),
            set_aside="" if index == 0 else "outside",
            iterations=6,
        )

    return Solution(
        star=star,
        treatment="lte",
        status=status,
        reason="" if status == "solved" else "two minima are equally likely",
        flags=("few_fe2_lines",),
        parameters=parameters,
        fixed=(),
        cov_star=covariance,
        cov_list=0.3 * covariance,
        residuals=np.array([1e-9, -2e-9, 1e-9, 3e-9]),
        residual_covariance=np.diag([0.006, 0.03, 0.02, 0.02]) ** 2,
        removed_residuals=(),
        chi2=1e-6,
        log_likelihood=41.2,
        degrees_of_freedom=int(used.sum()) - 4,
        line_scatter=0.068,
        fe1=fe1,
        fe2=fe2,
        solar_iron=7.46,
        zero_point_source="solar iron 7.46 (Asplund, Amarsi & Grevesse 2021)",
        lines=lines,
        trends=(
            Trend(
                name="excitation_slope",
                ion="Fe I",
                axis="excitation_potential",
                slope=0.0,
                slope_error=0.006,
                intercept=7.302,
                pivot=3.2,
                covariance=np.diag([0.012, 0.006]) ** 2,
                n_lines=39,
            ),
            Trend(
                name="strength_slope",
                ion="Fe I",
                axis="strength",
                slope=0.0,
                slope_error=0.03,
                intercept=7.302,
                pivot=-5.3,
                covariance=np.diag([0.012, 0.03]) ** 2,
                n_lines=39,
            ),
        ),
        candidates=(candidate(0, parameters, 0.0), candidate(1, parameters + np.array([-700, -1.5, -0.6, 0.8]), 44.0)),
        decisions=(
            Decision(
                step=1,
                kind="likelihood",
                subject="candidate 1",
                value=44.0,
                threshold=6.0,
                outcome="rejected",
                reason="It is less likely by more than 20 : 1.",
            ),
        ),
        sensitivities=tuple(
            Sensitivity(parameter=name, shift=sign * size, d_fe1=sign * a, d_fe2=sign * b)
            for name, size, a, b in (
                ("teff", 100.0, 0.08, -0.03),
                ("logg", 0.3, 0.0, 0.12),
                ("feh", 0.2, 0.01, 0.05),
                ("vmic", 0.2, -0.03, -0.04),
            )
            for sign in (1, -1)
        ),
        systematics={"blanketing_twice": np.array([12.0, 0.02, 0.01, 0.0])},
        outside=({"name": "logg", "mean": 4.3, "sigma": 0.1, "source": "made up"},),
        validity=("made-up limits apply.",),
        notes=("3 of 52 lines were repeats.",),
        n_input=n + 3,
        n_matched=n - 1,
        n_used=int(used.sum()),
        unmatched=("5250.21 Fe I",),
        iterations=6,
        grid_identity="ab" * 32,
        atmospheres_identity="cd" * 32,
        line_list_hash="ef" * 32,
        input_hash="01" * 32,
        grid_description="made-up grid, 210 lines",
        fe2_scale="made-up scale",
        alternative_parameters={"fe2_alternative": np.array([5520.0, 4.22, -0.17, 0.94])},
        options={"robust": "huber", "fixed": {}, "cuts": {"reduced_width": [-6.0, -4.8]}},
    )
