"""All reference sets solved blind in LTE and compared with the parameters that their papers give.

Read from the folder named by SPECSOLVE_REFERENCE; nothing is tuned. The figures are the result: per set the median offset
and the scatter against the published values, how many stars are tied, how many had several minima, and the width of the
pulls (difference over the errors of both). Published values are not the truth: papers differ in line lists, log gf and
in what they took from photometry or isochrones.
"""

from __future__ import annotations

import numpy as np
import pytest
from astropy.table import Table

from specsolve.balance.batch import Setting, solve_many
from specsolve.grid.store import ResponseGrid
from specsolve.star_table import read_stars

pytestmark = pytest.mark.slow

NAMES = ("teff", "logg", "feh", "vmic")
UNITS = ("K", "dex", "dex", "km/s")
COLUMNS = ("teff_K", "logg", "feh", "vmic_kms")
ERRORS = ("e_teff_K", "e_logg", "e_feh", "e_vmic_kms")
# Source; column of [Fe/H]; how the published values were made, where that is not LTE balance of the same kind.
SETS = {
    "dwarfs_differential": ("Bedell et al. 2017, ApJ 839, 94", "feh", "differential to the Sun"),
    "giants": ("Casey et al. 2014, ApJ 784, 19", "feh", ""),
    "group_giants": ("Casey et al. 2014, MNRAS 443, 828", "feh", ""),
    "metal_poor_2014": ("Roederer et al. 2014, AJ 147, 136", "mh_feI", "gravities partly from isochrones"),
    "metal_poor_2018": ("Sakari et al. 2018, ApJ 868, 110", "feI_H", "corrected to mean-3D NLTE"),
    "very_metal_poor_giants": ("Cayrel et al. 2004, A&A 416, 1117", "feh", "photometric temperatures"),
}
# Guards against getting worse, not what is asked: median offset of teff [K] and logg, share solved.
GUARDS = {"dwarfs_differential": (120.0, 0.25, 0.9), "giants": (150.0, 0.4, 0.6), "group_giants": (200.0, 0.5, 0.6)}


@pytest.mark.parametrize("name", list(SETS))
def test_reference_set(name, reference, figure):
    source, feh_column, made = SETS[name]
    table = Table.read(reference / "stars" / f"{name}_parameters.ecsv")
    columns = (COLUMNS[0], COLUMNS[1], feh_column, COLUMNS[3])
    published = {str(row["star"]): np.array([float(row[c]) for c in columns]) for row in table}
    errors = {
        str(row["star"]): np.array([float(row[c]) if c in table.colnames else 0.0 for c in ERRORS]) for row in table
    }
    stars = [star for star in read_stars(reference / "stars" / f"{name}_lines.ecsv") if star.name in published]
    solutions = solve_many(stars, ResponseGrid.packaged(), Setting(treatment="lte", compiled=True))
    label = f"{name} ({made})" if made else name
    count = {
        word: sum(one.status == word for one in solutions) for word in ("solved", "tied", "outside_grid", "unsolved")
    }
    for word, number in count.items():
        figure(f"{label}: {word} of {len(stars)}", number, source=source)
    several = sum(sum(not c.set_aside for c in one.candidates) > 1 for one in solutions)
    figure(f"{label}: with several minima", several, source=source)
    solved = [one for one in solutions if one.status in ("solved", "tied")]
    if len(solved) >= 3:
        difference = np.array([one.parameters - published[one.star] for one in solved])
        own = np.array([one.errors for one in solved])
        theirs = np.nan_to_num(np.array([errors[one.star] for one in solved]))
        pull = difference / np.hypot(own, theirs)
        median = np.nanmedian(difference, axis=0)
        for k, parameter in enumerate(NAMES):
            scatter = 1.4826 * np.nanmedian(np.abs(difference[:, k] - median[k]))
            words = f"median {parameter} - published, scatter {scatter:.3g}, mean error {np.nanmean(own[:, k]):.3g}"
            width = 1.4826 * np.nanmedian(np.abs(pull[:, k] - np.nanmedian(pull[:, k])))
            figure(f"{label}: {words}, pulls {np.nanmedian(pull[:, k]):+.2f} +- {width:.2f}", median[k], UNITS[k])
        if name in GUARDS:
            assert abs(median[0]) <= GUARDS[name][0]
            assert abs(median[1]) <= GUARDS[name][1]
    assert len(solutions) == len(stars)
    assert all(one.reason for one in solutions if one.status != "solved")
    if name in GUARDS:
        assert len(solved) >= GUARDS[name][2] * len(stars)
