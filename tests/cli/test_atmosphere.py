"""``specsolve atmosphere``: show, import, and a small build with the real solver."""

from __future__ import annotations

import json

import numpy as np
import pytest
from astropy.table import QTable

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.errors import OutputError


def run(*arguments: str):
    """Exit code, stdout and stderr of the command."""
    import subprocess
    import sys

    done = subprocess.run([sys.executable, "-m", "specsolve", *arguments], capture_output=True, text=True, check=False)
    return done.returncode, done.stdout, done.stderr


def test_show_prints_a_table_with_units():
    code, out, _ = run("atmosphere", "show", "5750", "4.5", "0")
    assert code == 0
    assert "g / cm2" in out
    assert "converged" in out


def test_show_json_and_table_are_the_stored_numbers(tmp_path):
    model = AtmosphereStore.packaged().get(4500.0, 1.5, -1.0)
    code, out, _ = run("atmosphere", "show", "4500", "1.5", "-1", "--json")
    assert code == 0
    np.testing.assert_allclose(json.loads(out)["columns"]["temperature"], model.temperature, rtol=1e-12)
    path = tmp_path / "one.ecsv"
    assert run("atmosphere", "show", "4500", "1.5", "-1", "--output", str(path))[0] == 0
    np.testing.assert_allclose(QTable.read(path)["temperature"].value, model.temperature, rtol=1e-12)


def test_show_draws(tmp_path):
    pytest.importorskip("matplotlib")
    path = tmp_path / "sun.png"
    code, _, err = run("atmosphere", "show", "5750", "4.5", "0", "--plot", str(path))
    assert code == 0, err
    assert path.read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("node", "code", "word"), [(("5800", "4.5", "0"), 3, "not a node"), (("7000", "0.5", "0"), 4, "radiation pressure")]
)
def test_show_says_why_there_is_none(node, code, word):
    got, _, err = run("atmosphere", "show", *node)
    assert got == code
    assert word in err
    assert err.count("\n") == 1


def test_shown_tables_are_imported_back(tmp_path):
    paths = []
    for teff in ("5500", "5750"):
        paths.append(str(tmp_path / f"{teff}.ecsv"))
        assert run("atmosphere", "show", teff, "4.5", "0", "--output", paths[-1])[0] == 0
    code, _, err = run("atmosphere", "import", *paths, "--output", str(tmp_path / "own"))
    assert code == 0, err
    store = AtmosphereStore.open(tmp_path / "own")
    np.testing.assert_allclose(
        store.get(5750.0, 4.5, 0.0).temperature,
        AtmosphereStore.packaged().get(5750.0, 4.5, 0.0).temperature,
        rtol=1e-12,
    )


def test_unwritable_output_is_one_line(tmp_path):
    (tmp_path / "file").write_text("")
    code, _, err = run(
        "atmosphere", "build", "--output", str(tmp_path / "file" / "x"), "--teff", "5750", "--logg", "4.5", "--mh", "0"
    )
    assert code == OutputError.exit_code
    assert "cannot write" in err
    assert err.count("\n") == 1


@pytest.mark.slow
def test_build_of_a_subset_equals_the_packaged_nodes(tmp_path):
    """Two nodes built from nothing agree with the packaged ones within 1 K above log tau 1.5."""
    code, _, err = run("atmosphere", "build", "--output", str(tmp_path / "new"), "--teff", "5500:5750:250", "--logg", "4.5",
                       "--mh", "0")  # fmt: skip
    assert code == 0, err
    built, packaged = AtmosphereStore.open(tmp_path / "new"), AtmosphereStore.packaged()
    for teff in (5500.0, 5750.0):
        ours, theirs = built.get(teff, 4.5, 0.0), packaged.get(teff, 4.5, 0.0)
        upper = theirs.log_tau < 1.5
        np.testing.assert_allclose(
            np.interp(theirs.log_tau[upper], ours.log_tau, ours.temperature), theirs.temperature[upper], atol=1.0
        )


def test_help_begins_with_what_it_does():
    code, out, _ = run("atmosphere", "--help")
    assert code == 0
    assert "import" in out
