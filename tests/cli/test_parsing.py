"""Option texts: right ones become values, wrong ones one clear usage error."""

from __future__ import annotations

import pytest

from specsolve.cli import outside, parsing
from specsolve.errors import UsageError


def test_values_and_errors():
    assert parsing.numbers(["logg=4.44", "teff=5772, feh=0"], "--fix") == {"logg": 4.44, "teff": 5772.0, "feh": 0.0}
    assert outside.priors(["vmic=1.1+-0.2"]) == outside.priors(["vmic=1.1:0.2"]) == {"vmic": (1.1, 0.2)}
    assert outside.measured_values(["numax=3090+-30"]) == {"numax": 3090.0, "numax_error": 30.0}
    assert outside.reference_parameters(["teff=5777+-10,logg=4.44"]) == ({"teff": 5777.0, "logg": 4.44}, {"teff": 10.0})
    assert parsing.cuts(["reduced_width=-6:-4.9", "wavelength=5000:7000"]) == {
        "reduced_width_range": (-6.0, -4.9),
        "wavelength_range": (5000.0, 7000.0),
    }
    assert parsing.column_names(["equivalent_width=EW (mA)"]) == {"equivalent_width": "EW (mA)"}
    assert parsing.ion_names(['Fe1="Fe I"', "ionized iron=Fe II"]) == {"Fe1": "Fe I", "ionized iron": "Fe II"}
    assert parsing.unit_names(["equivalent_width=pm"]) == {"equivalent_width": "pm"}


@pytest.mark.parametrize(
    ("function", "texts", "words"),
    [
        (lambda t: parsing.numbers(t, "--fix"), ["logg"], "write it as --fix logg=4.44"),
        (lambda t: parsing.numbers(t, "--fix"), ["gravity=4"], "the parameters are teff, logg, feh, vmic"),
        (lambda t: parsing.numbers(t, "--fix"), ["logg=four"], "'four' is not a number"),
        (lambda t: parsing.numbers(t, "--fix"), ["logg=nan"], "not a finite number"),
        (lambda t: parsing.numbers(t, "--fix"), ["teff=57720"], "between 2000 and 12000"),
        (lambda t: parsing.numbers(t, "--fix"), ["logg=4", "logg=5"], "gives logg twice"),
        (outside.priors, ["logg=4"], "give value and error"),
        (outside.priors, ["logg=4+-0"], "to hold a value use --fix"),
        (outside.priors, ["teff=100+-5"], "between 2000 and 12000"),
        (outside.measured_values, ["distance=4+-1"], "can be parallax, mass"),
        (outside.measured_values, ["parallax=4"], "give value and error"),
        (parsing.cuts, ["depth=0:1"], "can be reduced_width, excitation, wavelength"),
        (parsing.cuts, ["excitation=5:0"], "lower and upper limit"),
        (parsing.cuts, ["excitation=5"], "lower and upper limit"),
        (parsing.column_names, ["width=EW"], "has no column width"),
        (parsing.ion_names, ["x=Ti I"], 'can be "Fe I" or "Fe II"'),
        (parsing.unit_names, ["ion=mAngstrom"], "the columns with a unit"),
        (parsing.unit_names, ["equivalent_width=milli"], "not a unit"),
    ],
)
def test_misunderstandings(function, texts, words):
    with pytest.raises(UsageError) as caught:
        function(texts)
    assert words in str(caught.value)


def test_a_parameter_is_fixed_or_known_not_both():
    with pytest.raises(UsageError, match="both give logg"):
        parsing.disjoint({"logg": 4.0}, {"logg": (4.0, 0.1)})
