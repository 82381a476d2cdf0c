"""Age of the invented cluster Marsk 7 from a handoff of `specsolve cluster`; needs numpy, scipy and astropy alone.

    specsolve solve demo_data/cluster_widths.ecsv --output result
    specsolve cluster result.ecsv --output members
    python demo_data/fit_age.py members.ecsv demo_data/sequences.ecsv

Invented: neither the cluster nor the sequences exist. Two fits are made. The first uses what the handoff holds: each star's
covariance of (teff, logg, feh), the errors that all stars share through the line list, the probability of membership,
and all candidates of tied stars. The second takes point values with single error bars. Both sum over the phase of every star.
"""

import sys

import numpy as np
from astropy.table import Table
from scipy.optimize import minimize
from scipy.special import logsumexp

SHARED = 8  # modes of the shared errors that are fitted; they hold nearly all of it
FINER = 10  # points of a curve for one of the table
FIELD = np.array([600.0, 1.0, 0.5])  # standard deviations of (teff, logg, feh) of stars that do not belong


class Family:
    """Sequences on a mesh of age and [Fe/H], linear in between."""

    def __init__(self, table):
        self.ages, self.metals = np.unique(table["age"]), np.unique(table["feh"])
        shape = (self.ages.size, self.metals.size, -1)
        coarse = np.stack([np.array(table[name]).reshape(shape) for name in ("teff", "logg")], axis=-1)
        # Points along a curve must lie closer than the errors of a star, or ages between them would count for nothing.
        at = np.linspace(0.0, coarse.shape[2] - 1.0, FINER * (coarse.shape[2] - 1) + 1)
        low = np.minimum(at.astype(int), coarse.shape[2] - 2)
        share = (at - low)[:, None]
        self.curves = (1 - share) * coarse[:, :, low] + share * coarse[:, :, low + 1]

    def __call__(self, ln_age, feh):
        """(teff, logg, feh) along the curve, shape (n, 3)."""
        i, a = self._place(np.log(self.ages), ln_age)
        j, b = self._place(self.metals, feh)
        c = self.curves
        curve = (1 - a) * ((1 - b) * c[i, j] + b * c[i, j + 1]) + a * ((1 - b) * c[i + 1, j] + b * c[i + 1, j + 1])
        return np.column_stack([curve, np.full(len(curve), feh)])

    @staticmethod
    def _place(axis, value):
        i = int(np.clip(np.searchsorted(axis, value) - 1, 0, axis.size - 2))
        return i, np.clip((value - axis[i]) / (axis[i + 1] - axis[i]), 0.0, 1.0)


def fit(stars, family, scan=17):
    """ln age, its error, and [Fe/H].

    `stars` is a list of (probability of membership, [(odds, theta, covariance), ...], modes); modes of shape (3, n) are
    errors that all stars share.
    """
    modes = np.array([one[2] for one in stars])
    rows = [(i, member, *one) for i, (member, candidates, _) in enumerate(stars) for one in candidates]
    owner = np.array([row[0] for row in rows])
    first = np.flatnonzero(np.r_[True, np.diff(owner) > 0])
    odds, theta = np.array([row[2] for row in rows]), np.array([row[3] for row in rows])
    covariance = np.array([row[4] for row in rows])
    member = np.clip([row[1] for row in rows], 1e-9, 1.0 - 1e-9)
    inverse = np.linalg.inv(np.linalg.cholesky(covariance))
    ln_root = np.log(np.einsum("ijj->ij", inverse)).sum(axis=1)
    ln_off = np.log(odds * (1.0 - member)) - 0.5 * np.linalg.slogdet(covariance + np.diag(FIELD**2))[1]

    def objective(parameters):
        curve = family(parameters[0], parameters[1])
        centre = theta - (modes @ parameters[2:])[owner]
        z = np.einsum("cij,cpj->cpi", inverse, curve[None] - centre[:, None])
        ln_on = logsumexp(-0.5 * np.sum(z**2, axis=2), axis=1) - np.log(len(curve)) + ln_root + np.log(odds * member)
        of_star = np.logaddexp.reduceat(np.logaddexp(ln_on, ln_off), first)
        return 0.5 * np.sum(parameters[2:] ** 2) - of_star.sum()

    unit = np.r_[0.02, 0.02, np.ones(modes.shape[2])]  # steps of ln age, [Fe/H] and the shared errors that matter alike

    def descend(start, free):
        """Best value and place when the parameters before `free` are held."""
        found = minimize(
            lambda p: objective(np.r_[start[:free], p * unit[free:]]), start[free:] / unit[free:], method="BFGS"
        )
        return found.fun, np.r_[start[:free], found.x * unit[free:]]

    metals = np.clip(np.median(theta[first, 2]), family.metals[0], family.metals[-1])
    ages = np.linspace(np.log(family.ages[0]), np.log(family.ages[-1]), scan)
    starts = [np.r_[age, metals, np.zeros(modes.shape[2])] for age in ages]
    value, best = descend(min(starts, key=objective), 0)
    step = 0.05
    sides = [descend(np.r_[best[0] + side, best[1:]], 1)[0] for side in (-step, step)]
    curvature = max((sides[0] + sides[1] - 2.0 * value) / step**2, 1.0)
    return best[0], 1.0 / np.sqrt(curvature), best[1]


def from_handoff(table, candidates):
    """Everything that the handoff holds. The modes come in the order of their size: some as shared errors, the rest as own."""
    stars = []
    for row in table:
        mine = candidates[(candidates["star"] == row["star"]) & (candidates["treatment"] == row["treatment"])]
        modes = np.array(row["list_modes"])[:3]
        rest = modes[:, SHARED:] @ modes[:, SHARED:].T
        of_star = [
            (c["odds"], np.array([c["teff"], c["logg"], c["feh"]]), np.array(c["cov_star"])[:3, :3] + rest)
            for c in mine
        ]
        stars.append((row["member_probability"], of_star, modes[:, :SHARED]))
    return stars


def from_point_values(table):
    """Point values with single error bars, as a table of parameters in a paper gives them."""
    stars = []
    for row in table:
        errors = np.sqrt(np.diag(np.array(row["cov_star"]) + np.array(row["cov_list"])))[:3]
        theta = np.array([row["teff"], row["logg"], row["feh"]])
        stars.append((1.0, [(1.0, theta, np.diag(errors**2))], np.zeros((3, 0))))
    return stars


def main(handoff, sequences):
    table, family = Table.read(handoff), Family(Table.read(sequences))
    table = table[table["treatment"] == table["treatment"][-1]]
    candidates = Table.read(handoff.replace(".ecsv", "_candidates.ecsv"))
    for words, stars in (
        ("from the handoff     ", from_handoff(table, candidates)),
        ("from single errorbars", from_point_values(table)),
    ):
        ln_age, error, feh = fit(stars, family)
        age = np.exp(ln_age)
        print(f"age {words}: {age:.2f} +- {age * error:.2f} Gyr at [Fe/H] {feh:+.3f}")


if __name__ == "__main__":
    main(*sys.argv[1:3])
