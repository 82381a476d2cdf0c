"""What all tests share: the seed, the reference folder, the sampling of slow tests."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

import numpy as np
import pytest

SEED_VARIABLE = "SPECSOLVE_TEST_SEED"
REFERENCE_VARIABLE = "SPECSOLVE_REFERENCE"


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption(
        "--slow-sample",
        type=float,
        default=1.0,
        help="fraction of the slow tests to run, chosen by a hash of their names",
    )


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    fraction = config.getoption("--slow-sample")
    if fraction >= 1.0:
        return
    dropped = [item for item in items if item.get_closest_marker("slow") and not _kept(item, fraction)]
    if dropped:
        config.hook.pytest_deselected(items=dropped)
        items[:] = [item for item in items if item not in dropped]


def _kept(item: pytest.Item, fraction: float) -> bool:
    """A long check that takes `slow_fraction` samples its own cases; of the others the hash of the name chooses."""
    return "slow_fraction" in getattr(item, "fixturenames", ()) or _hash_fraction(item.nodeid) < fraction


def _hash_fraction(name: str) -> float:
    return int.from_bytes(hashlib.sha256(name.encode()).digest()[:4], "big") / 2**32


FIGURES: list[str] = []


@pytest.fixture
def figure(request: pytest.FixtureRequest):
    """Record a measured figure; all of them are printed after the run.

    ``figure("worst teff", 3.1, "K", limit="5", source="closure, 200 stars")``
    """

    def record(name: str, value: float, unit: str = "", *, limit: str = "", source: str = "") -> None:
        words = f"{request.node.name}: {name} = {value:.4g} {unit}".rstrip()
        words += f" (asked: {limit})" if limit else ""
        words += f" [{source}]" if source else ""
        FIGURES.append(words)

    return record


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    if FIGURES:
        terminalreporter.section("measured figures")
        for words in FIGURES:
            terminalreporter.write_line(words)


@pytest.fixture
def seed() -> int:
    """The seed of this run; another one by the environment variable SPECSOLVE_TEST_SEED."""
    return int(os.environ.get(SEED_VARIABLE, "20261201"))


@pytest.fixture
def rng(seed: int) -> np.random.Generator:
    return np.random.default_rng(seed)


@pytest.fixture(scope="session")
def reference() -> Path:
    """The folder of published figures; the test is skipped where SPECSOLVE_REFERENCE is not set."""
    folder = os.environ.get(REFERENCE_VARIABLE)
    if not folder:
        pytest.skip(f"{REFERENCE_VARIABLE} is not set")
    path = Path(folder)
    if not path.is_dir():
        pytest.fail(f"{REFERENCE_VARIABLE} names {folder}, which is not a folder")
    return path


@pytest.fixture(scope="session")
def slow_fraction(request: pytest.FixtureRequest) -> float:
    """The part of a long check's cases to run: 1 in the full run, less in the quick one."""
    return float(request.config.getoption("--slow-sample"))
