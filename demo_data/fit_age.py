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

FIELD = np.array([600.0, 1.0, 0.5])  # standard deviations of (teff, logg, feh) of stars that do not belong


class Family:
    """Sequences on a mesh of age and [Fe/H], linear in between."""

    def __init__(self, table):
        self.ages, self.metals = np.unique(table["age"]), np.unique(table["feh"])
        shape = (self.ages.size, self.metals.size, -1)
        self.curves = np.stack([np.array(table[name]).reshape(shape) for name in ("teff", "logg")], axis=-1)

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


def log_normal(points, centre, covariance):
    """ln density at points (n, 3)."""
    root = np.linalg.cholesky(covariance)
    z = np.linalg.solve(root, (points - centre).T)
    return -0.5 * np.sum(z**2, axis=0) - np.log(np.diag(root)).sum()


def fit(stars, family, start=(1.0, 0.0)):
    """ln age, its error, and [Fe/H]; `stars` is a list of (probability, [(odds, theta, covariance)], modes)."""
    modes = np.array([one[2] for one in stars])  # (star, 3, mode)
    n_modes = modes.shape[2]

    def objective(parameters):
        ln_age, feh, shared = parameters[0], parameters[1], parameters[2:]
        curve = family(ln_age, feh)
        total = 0.5 * np.sum(shared**2)
        for (member, candidates, _), mode in zip(stars, modes, strict=True):
            moved = mode @ shared
            of_star = []
            for odds, theta, covariance in candidates:
                on = logsumexp(log_normal(curve, theta - moved, covariance)) - np.log(len(curve))
                off = log_normal(theta[None], theta, covariance + np.diag(FIELD**2))[0]
                of_star += [np.log(odds * max(member, 1e-9)) + on, np.log(odds * max(1.0 - member, 1e-9)) + off]
            total -= logsumexp(of_star)
        return total

    begin = np.r_[start, np.zeros(n_modes)]
    # The likelihood is piecewise smooth between the tabulated curves: coarse starts, then a descent.
    ages = np.linspace(np.log(family.ages[1]), np.log(family.ages[-2]), 9)
    begin[1] = np.clip(np.median([c[0][1][2] for _, c, _ in stars]), family.metals[0], family.metals[-1])
    begin[0] = min(ages, key=lambda a: objective(np.r_[a, begin[1:]]))
    found = minimize(objective, begin, method="Powell", options={"xtol": 1e-4, "ftol": 1e-8})
    best = found.x

    def profile(ln_age):
        rest = minimize(lambda p: objective(np.r_[ln_age, p]), best[1:], method="Powell", options={"xtol": 1e-3})
        return rest.fun - found.fun

    step = 0.08
    curvature = (profile(best[0] + step) + profile(best[0] - step)) / step**2
    return best[0], 1.0 / np.sqrt(max(curvature, 1e-9)), best[1]


def from_handoff(table, candidates):
    """Everything that the handoff holds."""
    stars = []
    for row in table:
        mine = candidates[(candidates["star"] == row["star"]) & (candidates["treatment"] == row["treatment"])]
        of_star = [
            (c["odds"], np.array([c["teff"], c["logg"], c["feh"]]), np.array(c["cov_star"])[:3, :3]) for c in mine
        ]
        stars.append((row["member_probability"], of_star, strongest(np.array(row["list_modes"])[:3])))
    return stars


def strongest(modes, number=3):
    """The modes come in the order of their size; a few hold nearly all."""
    out = np.zeros((3, number))
    out[:, : min(number, modes.shape[1])] = modes[:, :number]
    return out


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
