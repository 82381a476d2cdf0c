"""Wheel and sdist: built, installed elsewhere, and used from an empty folder."""

from __future__ import annotations

import os
import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pytest

from specsolve import __version__
from specsolve.report.tables import read_table

ROOT = Path(__file__).resolve().parents[2]
WHEEL_LIMIT_MB = 90.0

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def built(tmp_path_factory):
    """The sdist, and the wheel made from that sdist."""
    folder = tmp_path_factory.mktemp("dist")
    command = [sys.executable, "-m", "build", "--no-isolation", "--outdir", str(folder), str(ROOT)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=600)
    assert done.returncode == 0, done.stdout + done.stderr
    (wheel,) = folder.glob("*.whl")
    (sdist,) = folder.glob("*.tar.gz")
    return wheel, sdist


@pytest.fixture(scope="module")
def installed(built, tmp_path_factory):
    """The wheel installed into a folder of its own."""
    target = tmp_path_factory.mktemp("site")
    command = [sys.executable, "-m", "pip", "install", "--quiet", "--no-deps", "--target", str(target), str(built[0])]
    done = subprocess.run(command, capture_output=True, text=True, timeout=600)
    assert done.returncode == 0, done.stdout + done.stderr
    return target


def use(installed, folder, *arguments):
    environment = {**os.environ, "PYTHONPATH": str(installed), "PYTHONDONTWRITEBYTECODE": "1"}
    return subprocess.run(
        [sys.executable, *arguments], cwd=folder, env=environment, capture_output=True, text=True, timeout=600
    )


def test_contents_and_size(built, figure):
    wheel, sdist = built
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
    foreign = [name for name in names if not name.startswith(("specsolve/", f"specsolve-{__version__}.dist-info/"))]
    assert foreign == []
    packaged = {str(path.relative_to(ROOT)) for path in tracked() if path.is_relative_to(ROOT / "specsolve")}
    assert packaged - set(names) == set()
    assert not [name for name in names if "__pycache__" in name]
    size = wheel.stat().st_size / 1e6
    figure("wheel", size, "MB", limit=f"< {WHEEL_LIMIT_MB:g}")
    assert size < WHEEL_LIMIT_MB
    with tarfile.open(sdist) as archive:
        inside = {name.split("/", 1)[1] for name in archive.getnames() if "/" in name}
    assert {
        str(path.relative_to(ROOT)) for path in tracked() if not path.name.startswith(".") and path.parent.name != ".ci"
    } <= inside


def tracked():
    done = subprocess.run(["git", "-C", str(ROOT), "ls-files", "-z"], capture_output=True, text=True)
    if done.returncode != 0:
        pytest.fail("the package test runs in a git checkout")
    return [ROOT / name for name in done.stdout.split("\0") if name and (ROOT / name).exists()]


def test_the_demo_solves_from_an_empty_folder(installed, tmp_path):
    where = use(installed, tmp_path, "-P", "-c", "import specsolve; print(specsolve.__file__)")
    assert Path(where.stdout.strip()).is_relative_to(installed), where.stderr
    widths = str(ROOT / "demo_data" / "cluster_widths.ecsv")
    done = use(installed, tmp_path, "-P", "-m", "specsolve", "solve", widths, "--output", "cluster")
    assert done.returncode in (0, 4), done.stderr
    stars = read_table(tmp_path / "cluster.ecsv", "stars")
    assert len(stars) >= 12
    assert list(stars["status"]).count("solved") >= 11
    assert sorted(path.name for path in tmp_path.iterdir()) == [
        "cluster.ecsv",
        "cluster_candidates.ecsv",
        "cluster_decisions.ecsv",
        "cluster_lines.ecsv",
    ]


def test_the_script_is_installed(installed):
    assert (installed / "bin" / "specsolve").exists() or (installed / "Scripts" / "specsolve.exe").exists()
