"""The invented cluster prepared for age fitting: members, tied stars, feedback, handoff files, and the command."""

from __future__ import annotations

import dataclasses
import subprocess
import sys

import numpy as np
import pytest
from astropy.table import Table

from specsolve.cli.main import run
from specsolve.errors import EXIT_NO_INPUT, EXIT_SOLVED, EXIT_UNSOLVED, EXIT_USAGE, InputError
from specsolve.report.kiel import kiel
from specsolve.report.tables import read_table, write_solutions
from specsolve.uses.cluster import cluster
from specsolve.uses.handoff import EXAMPLE, handoff_tables, write_handoff
from specsolve.uses.sequence import nearest_on_polyline, read_sequence
from tests.uses.conftest import CLUSTER, CLUSTER_FEH

MEMBERS = [name for name in CLUSTER if name != "stranger"]


def made_tied(solutions, place: int = 3):
    """The same solutions, one of them tied with an invented candidate far in [Fe/H]."""
    one = solutions[place]
    first = dataclasses.replace(one.candidates[0], index=0, odds=0.45, set_aside="", delta=0.0)
    other = dataclasses.replace(
        first, index=1, odds=0.55, parameters=one.parameters + np.array([-150.0, -0.5, -0.55, 0.1])
    )
    tied = dataclasses.replace(one, status="tied", reason="made up for this test", candidates=(first, other))
    return [*solutions[:place], tied, *solutions[place + 1 :]]


@pytest.fixture(scope="module")
def found(solutions, grid):
    return cluster(solutions, grid)


@pytest.fixture(scope="module")
def tables(found):
    return handoff_tables(found, np.random.default_rng(3), 300)


def test_common_metallicity_and_membership(found):
    common = found.common["lte"]
    assert [member.name for member in found.members if member.probability < 0.5] == ["stranger"]
    # log gf errors drawn for the whole list shift all members alike: the list's part counts here, once.
    row = handoff_tables(found, n_samples=1)["cluster"][0]
    error = np.hypot(row["feh_error_star"], row["feh_error_list"])
    assert abs(common.feh - CLUSTER_FEH) < 3.0 * error
    assert row["feh_error_list"] > 0.0
    assert any("was not fed" in note for note in found.notes)


def test_handoff_columns(found, tables):
    handoff = tables["handoff"]
    assert len(handoff) == len(CLUSTER)
    for row, member in zip(handoff, found.members, strict=True):
        np.testing.assert_allclose(row["list_modes"] @ row["list_modes"].T, row["cov_list"], rtol=1e-9)
        np.testing.assert_allclose(row["cov_list"], member.point.cov_list, rtol=3e-3, atol=1e-8)


def test_samples_share_the_errors_of_the_list(found, tables):
    samples = tables["handoff_samples"]
    feh = {name: np.asarray(samples["feh"])[np.asarray(samples["star"]) == name] for name in MEMBERS[:2]}
    first, second = (member for member in found.members if member.name in MEMBERS[:2])
    shared = (found.modes[0] @ found.modes[1].T)[2, 2]
    total = [np.sqrt((m.point.cov_star + m.point.cov_list)[2, 2]) for m in (first, second)]
    expected = shared / (total[0] * total[1])
    measured = np.corrcoef(*feh.values())[0, 1]
    assert measured == pytest.approx(expected, abs=4.0 / np.sqrt(300))
    assert np.std(feh[MEMBERS[0]]) == pytest.approx(total[0], rel=0.2)


def test_a_tied_star_is_settled_by_the_others(solutions, grid):
    made = cluster(made_tied(solutions), grid)
    member = made.members[3]
    if len(member.candidates) == 1:  # the invented candidate led back to the real one when it was solved again
        pytest.fail("the invented candidate vanished")
    assert {c.index for c in member.candidates} == {0, 1}
    assert sum(c.odds for c in member.candidates) == pytest.approx(1.0)
    assert [step.kind for step in member.decisions] == ["cluster_metallicity"]


def test_feedback_is_never_silent(solutions, grid, found):
    fed = cluster(solutions, grid, feed_metallicity=True)
    assert any("was fed into 4 solutions" in note for note in fed.notes)
    for before, after in zip(found.members, fed.members, strict=True):
        if before.name == "stranger":
            assert np.isnan(after.prior[0])
            np.testing.assert_array_equal(after.point.theta, after.before)
        else:
            assert after.decisions[-1].kind == "outside"
            np.testing.assert_allclose(after.before, before.point.theta)
            # The prior pulls [Fe/H] towards the others.
            step = after.point.theta[2] - before.point.theta[2]
            assert step * (after.prior[0] - before.point.theta[2]) > 0.0
    # What all stars share does not shrink because they are told of each other.
    shared = [np.sum(one.modes[:4, 2] ** 2, axis=1) for one in (found, fed)]
    assert (shared[1] > 0.4 * shared[0]).all()


def sequence_table() -> Table:
    rows = [
        (age, teff - 40 * age, logg)
        for age in (1.0, 2.0)
        for teff, logg in ((6000, 4.3), (5600, 4.45), (5500, 3.7), (4900, 2.6))
    ]
    table = Table(rows=rows, names=("age", "teff", "logg"))
    table["teff"].unit = "K"
    return table


def test_a_sequence_is_overlaid_and_decides_nothing(solutions, grid):
    curves = read_sequence(sequence_table())
    assert [curve.labels for curve in curves] == ["age 1.0", "age 2.0"]
    made = cluster(made_tied(solutions), grid, sequence=curves)
    assert all(np.isfinite(member.sequence[0]) for member in made.members)
    assert all("cluster_sequence" not in [s.kind for s in member.decisions] for member in made.members)
    assert not any("sequence" in note for note in made.notes)
    asked = cluster(made_tied(solutions), grid, sequence=curves, decide_by_sequence=True)
    assert any("fed by its own answer" in note for note in asked.notes)
    assert "cluster_sequence" in [step.kind for step in asked.members[3].decisions]


def test_distance_from_a_line_on_paper():
    assert nearest_on_polyline(np.array([[3.0, 4.0], [3.0, 8.0]])) == pytest.approx(5.0)
    assert nearest_on_polyline(np.array([[-1.0, 1.0], [1.0, 1.0], [1.0, 5.0]])) == pytest.approx(1.0)


def test_files_of_the_handoff(found, tmp_path):
    paths = write_handoff(found, tmp_path / "members", n_samples=20)
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(path.name for path in paths.values())
    back = Table.read(paths["handoff"], format="ascii.ecsv")
    same = Table.read(paths["fits"], hdu="HANDOFF")
    for name in ("teff", "cov_star", "list_modes"):
        np.testing.assert_array_equal(np.asarray(back[name]), np.asarray(same[name]))
    assert len(Table.read(paths["fits"], hdu="HANDOFF_SAMPLES")) == 20 * len(CLUSTER)
    text = paths["about"].read_text()
    for words in ("list_modes", "member_probability", "from astropy.table import Table"):
        assert words in text
    code = EXAMPLE.format(name="members") + "print(covariance.shape)\n"
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == f"({4 * len(CLUSTER)}, {4 * len(CLUSTER)})"
    assert len(EXAMPLE.strip().splitlines()) == 5


def test_the_diagram(tables):
    pytest.importorskip("matplotlib")
    figure = kiel(tables["handoff"], tables["handoff_candidates"], read_sequence(sequence_table()))
    axes = figure.axes[0]
    assert axes.get_xlim()[0] > axes.get_xlim()[1]
    assert len(axes.patches) == len(CLUSTER)  # an ellipse a star


def test_the_command(result_file, grid, tmp_path, capsys):
    arguments = ["cluster", str(result_file), "--grid", str(grid.directory), "--output", str(tmp_path / "members")]
    assert run([*arguments, "--feed-metallicity", "--samples", "5"]) == EXIT_SOLVED
    said = capsys.readouterr()
    assert "common [Fe/H]" in said.out
    assert "was fed into" in said.err
    assert read_table(tmp_path / "members_decisions.ecsv", "decisions")["kind"].tolist().count("outside") == 4


def test_bad_input(solutions, result_file, grid, tmp_path, capsys):
    with pytest.raises(InputError, match="needs 2 stars"):
        cluster(solutions[:1], grid)
    one = tmp_path / "one.ecsv"
    write_solutions(solutions[:1], one)
    arguments = ["--grid", str(grid.directory), "--output", str(tmp_path / "out")]

    def fails(code: int, words: str, name, *more: str) -> None:
        assert run(["cluster", str(name), *arguments, *more]) == code
        error = capsys.readouterr().err
        assert words in error
        assert error.count("\n") == 1
        assert not list(tmp_path.glob("out*"))

    fails(EXIT_NO_INPUT, "needs 2 stars", one)
    fails(EXIT_NO_INPUT, "no such file", tmp_path / "nothing.ecsv")
    fails(EXIT_NO_INPUT, "not stars", result_file.parent / "members_lines.ecsv")
    fails(EXIT_USAGE, "needs --sequence", result_file, "--decide-by-sequence")
    Table({"teff": [5000.0, 5100.0]}).write(tmp_path / "seq.ecsv", format="ascii.ecsv")
    fails(EXIT_NO_INPUT, "columns teff and logg", result_file, "--sequence", str(tmp_path / "seq.ecsv"))


def test_all_tied(solutions, grid, tmp_path, capsys):
    """Every star tied with a twin candidate: a handoff with all of them, and an exit code that says so."""
    tied = list(solutions[:3])
    for place in range(3):
        tied = made_twin(tied, place)
    path = tmp_path / "tied.ecsv"
    write_solutions(tied, path)
    code = run(["cluster", str(path), "--grid", str(grid.directory), "--output", str(tmp_path / "members")])
    assert code == EXIT_UNSOLVED
    assert "still tied" in capsys.readouterr().err
    back = Table.read(tmp_path / "members_candidates.ecsv", format="ascii.ecsv")
    assert len(back) == 6


def made_twin(solutions, place: int):
    """A second candidate with the same parameters: nothing can settle it."""
    one = solutions[place]
    first = dataclasses.replace(one.candidates[0], index=0, odds=0.5, set_aside="", delta=0.0)
    twin = dataclasses.replace(first, index=1)
    tied = dataclasses.replace(one, status="tied", reason="made up for this test", candidates=(first, twin))
    return [*solutions[:place], tied, *solutions[place + 1 :]]
