"""What the terminal shows of a solution."""

from __future__ import annotations

import io
from dataclasses import replace

import numpy as np
import pytest
from rich.console import Console

from specsolve.report.sheet import most_influential, print_solutions
from tests.report.made_up import made_up_solution


def shown(solutions, full=None, width=150):
    stream = io.StringIO()
    print_solutions(solutions, Console(file=stream, width=width), full=full)
    return stream.getvalue()


@pytest.fixture
def one(rng):
    return made_up_solution(rng, "[red]star")


def test_first_line_names_treatment_solar_iron_and_grid(one):
    for full in (True, False):
        assert shown([one], full).splitlines()[0].startswith("treatment lte | solar iron 7.46 | grid made-up grid")


def test_sheet_holds_every_number_a_reader_needs(one):
    text = shown([one])
    for piece in (
        "5512",
        "4.31",
        "-0.158",
        "0.93",
        "7.302",
        "7.299",
        "Teff +100 K",
        "few_fe2_lines",
        "2 minima found",
        "made-up limits apply.",
        "52 lines in the input, 48 in the grid, 45 used",
        "made-up scale",
        "left out by the cuts: 3 predicted strength cut",
        "dropped: not in grid",
        "weight 0.40",
        "[red]star",
    ):
        assert piece in text, piece


def test_many_stars_get_one_line_each_and_shared_notes_once(rng):
    stars = [made_up_solution(rng, f"s{i}") for i in range(5)]
    text = shown(stars)
    assert text.count("made-up limits apply.") == 1
    assert "(all stars)" in text
    assert sum(line.startswith(("s0", "s1", "s2", "s3", "s4")) for line in text.splitlines()) == 5


def test_a_fixed_parameter_has_no_error_and_says_fixed(one):
    fixed = replace(one, fixed=("logg",), removed_residuals=("ionization_offset",))
    row = next(line for line in shown([fixed]).splitlines() if line.lstrip().startswith("log g"))
    assert row.split() == ["log", "g", "4.31", "fixed"]
    assert "reported, not used" in shown([fixed])
    assert "4.31 f" in shown([fixed], full=False)


def test_unsolved_stars_show_their_reason_and_no_numbers(one):
    nothing = replace(one, status="unsolved", reason="2 usable lines", parameters=np.full(4, np.nan))
    assert "2 usable lines" in shown([nothing])
    assert "nan" not in shown([nothing])
    assert "unsolved: 2 usable lines" in shown([nothing], full=False)


def test_the_most_influential_line_moves_the_star_most(one):
    first = most_influential(one)[0]
    size = np.abs(one.lines.influence / one.errors_star).max(axis=1)
    assert first == np.argmax(size)
    assert one.lines.used[most_influential(one)].all()


def test_what_comes_from_elsewhere_is_said(one):
    assert "share from elsewhere" not in shown([one])
    share = np.array([0.35, 0.98, 0.0, 1.0])
    text = shown([replace(one, outside_share=share, fixed=("vmic",), alpha=0.2, alpha_given=True)])
    assert (
        "share from elsewhere: Teff 35 %, log g 98 %; the rest comes from the lines; [alpha/Fe] +0.20 as given" in text
    )
