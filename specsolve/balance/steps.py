"""Units, limits and tolerances of the way to a minimum, shared by `newton` and its compiled twin."""

from __future__ import annotations

import numpy as np

# Units in which steps are measured, one default grid step of each axis: K, dex, dex, km/s.
STEP_UNIT = np.array([250.0, 0.5, 0.5, 0.5])
MAX_STEP = 1.0  # in STEP_UNIT
# The step below the tolerance is still taken, and steps shrink nearly quadratically: 1e-5 is 2.5e-3 K, and far less is left.
STEP_TOLERANCE = 1e-5  # in STEP_UNIT
ROUGH_TOLERANCE = 5e-2  # in STEP_UNIT
STALLED_STEP = 1e-4  # where no damping gives a better point, the full step must be below this to count as an end
MAX_HALVINGS = 12
LEVENBERG_START = 1e-3
RANK_TOLERANCE = 1e-10
VMIC = 3  # place of the microturbulence in theta
NEAR_ZERO_VMIC = 0.05  # km/s; below it widths hardly feel vmic any more, and steps towards zero never end
ON_FACE = 1e-6  # in STEP_UNIT
ROOT_OBJECTIVE = 1e-6  # chi2 below which residuals and Outside terms are met
# Line abundances this near to known ones are continued to first order: curvatures of 0.1 dex a unit squared leave 2e-11 dex.
CONTINUED = 2e-5  # in STEP_UNIT
