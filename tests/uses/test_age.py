"""An age from the handoff is unbiased; the same fit from point values with single error bars is not.

The cluster and the family of sequences are invented (`specsolve.demo_sequences`). Errors are those of the solved demo cluster:
its own covariances and the shared modes of the line list. The fit is the script that comes with the demo.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

import specsolve
from specsolve.demo import CLUSTER_FEH, MEMBERS
from specsolve.demo_sequences import AGES, TRUE_AGE, sequence, table
from specsolve.uses.cluster import cluster
from specsolve.uses.handoff import root, write_handoff
from specsolve.uses.mixture import common_metallicity, metallicities

DEMO = Path(__file__).resolve().parents[2] / "demo_data"
N_CLUSTERS = 16
FIELD_STARS, TIED_STARS = 1, 2
WRONG_CANDIDATE = np.array([-170.0, -0.48, -0.16, 0.12])  # from the right one; invented, along the usual degeneracy


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("fit_age", DEMO / "fit_age.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def family(script):
    return script.Family(table())


@pytest.fixture(scope="module")
def members():
    return cluster(specsolve.solve(DEMO / "cluster_widths.ecsv"))


def test_the_family_goes_through_the_members():
    order = sorted(MEMBERS, key=lambda member: -member.logg)
    teff, logg = sequence(TRUE_AGE, CLUSTER_FEH, np.arange(len(order)))
    np.testing.assert_allclose(teff, [member.teff for member in order])
    np.testing.assert_allclose(logg, [member.logg for member in order])
    young, old = (sequence(age, CLUSTER_FEH, np.linspace(0, 11, 200))[0].max() for age in (AGES[0], AGES[-1]))
    assert young > old + 500.0  # the turn-off cools with age


def test_the_committed_sequences_are_made_by_the_command():
    committed = Table.read(DEMO / "sequences.ecsv", format="ascii.ecsv")
    made = table()
    for name in made.colnames:
        np.testing.assert_allclose(committed[name], made[name])


def draw(members, rng):
    """One cluster on the family, as a handoff and as point values: (from_handoff, from_points)."""
    own = [member.point.cov_star for member in members.members]
    modes = members.modes
    z = rng.standard_normal(modes.shape[2])
    n = len(own)
    phase = rng.uniform(0.0, 11.0, n)
    teff, logg = sequence(TRUE_AGE, CLUSTER_FEH, phase)
    truth = np.column_stack([teff, logg, np.full(n, CLUSTER_FEH), np.full(n, 1.2)])
    # Each star gets the errors of the member that is nearest on the sequence.
    order = np.argsort([-member.point.theta[1] for member in members.members])
    like = order[np.clip(np.rint(phase).astype(int), 0, n - 1)]
    field = rng.choice(n, FIELD_STARS, replace=False)
    truth[field, 0] += rng.choice([-1.0, 1.0], FIELD_STARS) * rng.uniform(200.0, 500.0, FIELD_STARS)
    truth[field, 2] += rng.choice([-1.0, 1.0], FIELD_STARS) * rng.uniform(0.3, 0.6, FIELD_STARS)
    seen = np.array(
        [t + root(own[k]) @ rng.standard_normal(4) + modes[k] @ z for t, k in zip(truth, like, strict=True)]
    )
    tied = rng.choice(np.setdiff1d(np.arange(n), field), TIED_STARS, replace=False)
    candidates = [[(1.0, one)] for one in seen]
    for i in tied:
        candidates[i] = [(0.55, seen[i] + WRONG_CANDIDATE), (0.45, seen[i])]  # the wrong one is reported
    data = metallicities(
        [[c[1][2] for c in one] for one in candidates],
        [[np.sqrt(own[k][2, 2])] * len(one) for one, k in zip(candidates, like, strict=True)],
        [[c[0] for c in one] for one in candidates],
    )
    probability = common_metallicity(data).membership
    handoff, points = [], []
    for one, k, p in zip(candidates, like, probability, strict=True):
        rest = modes[k][:3, 3:] @ modes[k][:3, 3:].T
        handoff.append((p, [(odds, theta[:3], own[k][:3, :3] + rest) for odds, theta in one], modes[k][:3, :3]))
        single = np.diag(np.diag(own[k] + modes[k] @ modes[k].T)[:3])
        points.append((1.0, [(1.0, one[0][1][:3], single)], np.zeros((3, 0))))
    return handoff, points


@pytest.mark.slow
def test_the_age_is_unbiased_from_the_handoff_and_biased_from_single_error_bars(members, script, family, rng, figure):
    found = np.array(
        [[script.fit(one, family)[:2] for one in draw(members, rng)] for _ in range(N_CLUSTERS)]
    )  # (cluster, way, (ln age, error))
    deviation = found[:, :, 0] - np.log(TRUE_AGE)
    mean, error = deviation.mean(axis=0), deviation.std(axis=0, ddof=1) / np.sqrt(N_CLUSTERS)
    pulls = np.sqrt(np.mean((deviation / found[:, :, 1]) ** 2, axis=0))
    for k, way in enumerate(("handoff", "single error bars")):
        figure(
            f"age from {way}: mean of ln(age / true)",
            mean[k],
            f"+- {error[k]:.3f}",
            limit="0 within its error" if k == 0 else "",
        )
        figure(f"age from {way}: rms of ln(age / true)", np.sqrt(np.mean(deviation[:, k] ** 2)))
        figure(f"age from {way}: rms of deviation over stated error", pulls[k], limit="1")
    assert abs(mean[0]) < 3.0 * error[0]
    assert pulls[0] < 1.6
    assert abs(mean[1]) > 3.0 * error[1] or pulls[1] > 1.5 * pulls[0]


def test_the_demo_from_widths_to_age(members, script, tmp_path, capsys, figure):
    """The whole way: solved widths, handoff, age; and the same from single error bars beside it."""
    paths = write_handoff(members, tmp_path / "members", n_samples=10)
    table().write(tmp_path / "sequences.ecsv", format="ascii.ecsv")
    script.main(str(paths["handoff"]), str(tmp_path / "sequences.ecsv"))
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 2
    ages = [float(line.split(":")[1].split()[0]) for line in lines]
    errors = [float(line.split("+-")[1].split()[0]) for line in lines]
    figure("demo: age from the handoff", ages[0], f"+- {errors[0]:.2f} Gyr", limit=f"{TRUE_AGE}")
    figure("demo: age from single error bars", ages[1], f"+- {errors[1]:.2f} Gyr", limit=f"{TRUE_AGE}")
    assert abs(ages[0] - TRUE_AGE) < 3.0 * errors[0]
