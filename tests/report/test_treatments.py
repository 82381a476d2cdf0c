"""Differences between treatments and their errors."""

from dataclasses import replace

import numpy as np

from specsolve.report.tables import read_table, write_solutions
from specsolve.report.treatments import difference_errors, of_solutions, rows_for_json, words, write_differences
from tests.report.made_up import made_up_solution

SHIFT = np.array([60.0, 0.2, 0.08, -0.05])


def pair():
    lte = made_up_solution(np.random.default_rng(8))
    lines = replace(lte.lines, influence=lte.lines.influence * 1.1)
    return [lte, replace(lte, treatment="nlte", parameters=lte.parameters + SHIFT, lines=lines)]


def test_differences_are_nlte_minus_lte():
    table = of_solutions(pair())
    assert len(table) == 1
    found = [table[f"{name}_difference"][0] for name in ("teff", "logg", "feh", "vmic")]
    np.testing.assert_allclose(found, SHIFT)
    assert table["fe1_abundance_difference"][0] == 0.0


def test_error_of_a_difference_is_much_smaller_than_those_of_its_parts():
    """The same lines with influences that differ by a tenth: a tenth of one solve's own jackknife error."""
    lte, nlte = pair()
    used = lte.lines.used
    n = used.sum()
    own = np.sqrt((n - 1) / n * (lte.lines.influence[used, 0] ** 2).sum())
    found = of_solutions([lte, nlte])["teff_difference_error"][0]
    np.testing.assert_allclose(found, 0.1 * own, rtol=0.05)
    assert found > 0.0


def test_jackknife_of_a_mean():
    """Lines shift one mean by independent amounts: the error is that of the mean."""
    rng = np.random.default_rng(4)
    n = 400
    values = rng.normal(0.0, 1.0, n)
    influence = {str(i): np.full(4, (values.mean() - v) / (n - 1)) for i, v in enumerate(values)}
    zero = {str(i): np.zeros(4) for i in range(n)}
    np.testing.assert_allclose(difference_errors(zero, influence), values.std(ddof=1) / np.sqrt(n), rtol=1e-6)
    assert np.isnan(difference_errors({}, {"a": np.ones(4)})).all()


def test_a_star_with_one_treatment_has_no_row(tmp_path):
    solutions = pair()
    assert len(of_solutions(solutions[:1])) == 0
    write_solutions(solutions, tmp_path / "run")
    path = write_differences(tmp_path / "run.ecsv")
    assert path.name == "run_differences.ecsv"
    table = read_table(path, "differences")
    np.testing.assert_allclose(table["teff_difference"][0], SHIFT[0])


def test_words_and_json_say_the_same():
    solutions = pair()
    text = words(solutions)
    assert "Teff +60 +- " in text[1]
    assert rows_for_json(solutions)[0]["logg_difference"] == of_solutions(solutions)["logg_difference"][0]
