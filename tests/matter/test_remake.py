"""The packaged tables are what their commands make."""

import numpy as np
import pytest

from specsolve.matter import continuum_build, partition_build
from specsolve.matter.partition import TABLE_PATH as PARTITION_PATH
from specsolve.matter.photoionization import TABLE_PATH as CONTINUUM_PATH


@pytest.mark.parametrize(
    ("build", "path"),
    [
        (partition_build.build, PARTITION_PATH),
        pytest.param(continuum_build.build, CONTINUUM_PATH, marks=pytest.mark.slow),
    ],
    ids=["partition", "continuum"],
)
def test_remade_table_is_the_packaged_one(reference, build, path):
    remade = build(reference)
    with np.load(path) as packaged:
        assert sorted(packaged.files) == sorted(remade)
        for name, values in remade.items():
            if values.dtype.kind == "f":
                np.testing.assert_allclose(packaged[name], values, rtol=1e-6, atol=1e-9, err_msg=name)
            else:
                assert np.array_equal(packaged[name], values), name
