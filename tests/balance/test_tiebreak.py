"""Published relations of microturbulence, and who wins by which step of the rule."""

from __future__ import annotations

import pytest

from specsolve.balance.relations import DWARF_SIGMA, minus_two_log_prior, vmic_relation
from specsolve.balance.tiebreak import set_aside_reason


def test_relation_at_the_sun():
    """The Sun's microturbulence in such analyses: 0.97 km/s (Bedell et al. 2017, ApJ 839, 94)."""
    assert vmic_relation(5772.0, 4.44).vmic == pytest.approx(0.97, abs=0.06)


def test_relation_of_a_clump_giant():
    """Clump giants: 1.4 to 1.6 km/s (common practice, no source)."""
    assert 1.4 < vmic_relation(4700.0, 2.4).vmic < 1.65


@pytest.mark.parametrize(("teff", "logg"), [(4500.0, 4.6), (6950.0, 4.2), (5800.0, 2.0), (3900.0, 1.0)])
def test_no_relation_outside_its_range(teff, logg):
    assert vmic_relation(teff, logg) is None


def test_prior_widens_with_the_measured_error():
    relation = vmic_relation(5772.0, 4.44)
    off = relation.vmic + 0.6
    assert minus_two_log_prior(off, 0.0, relation) - minus_two_log_prior(relation.vmic, 0.0, relation) == pytest.approx(
        (0.6 / DWARF_SIGMA) ** 2
    )
    wide = minus_two_log_prior(off, 1.0, relation) - minus_two_log_prior(relation.vmic, 1.0, relation)
    assert wide < 0.4


def test_reasons_to_set_aside():
    assert set_aside_reason(("at_grid_edge",)) == ""
    assert "edge" in set_aside_reason(("at_grid_edge", "outside_grid"))
    assert "converge" in set_aside_reason(("not_converged",))
    assert "missing" in set_aside_reason(("beside_missing_node",))
    assert set_aside_reason(("beside_missing_node",), others=False) == ""
    assert set_aside_reason(()) == ""
