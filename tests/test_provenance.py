"""Where a result comes from."""

from __future__ import annotations

import hashlib
import json

from specsolve import __version__
from specsolve.provenance import collect, file_sha256


def test_all_that_is_needed_is_there_and_is_json(tmp_path):
    table = tmp_path / "widths.csv"
    table.write_bytes(b"a,b\n1,2\n")
    found = collect(inputs=[table, "-"], options={"fix": {"logg": 4.4}}, command_line=["specsolve", "solve", "a b"])
    assert json.loads(json.dumps(found)) == found
    assert found["specsolve"] == __version__
    assert found["inputs"] == {"widths.csv": hashlib.sha256(b"a,b\n1,2\n").hexdigest()}
    assert found["command_line"] == "specsolve solve 'a b'"
    assert set(found["versions"]) == {"python", "numpy", "scipy", "astropy", "numba"}
    assert found["utc"].endswith("+00:00")


def test_large_files_are_hashed_in_blocks(tmp_path):
    path = tmp_path / "large"
    data = b"0123456789abcdef" * 200_000
    path.write_bytes(data)
    assert file_sha256(path) == hashlib.sha256(data).hexdigest()
