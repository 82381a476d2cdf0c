"""README and DEVELOPERS say what is so."""

from __future__ import annotations

import itertools
import re
import shlex
import subprocess
import tomllib
from pathlib import Path

import click
import pytest

import specsolve
from specsolve.cli.main import COMMANDS, group

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text()


def commands_of(text):
    """Indented command lines of a text."""
    return [line.strip() for line in text.splitlines() if line.startswith("    ")]


def test_the_readme_opens_with_one_paragraph_and_two_commands():
    opening = README.split("\n## ", 1)[0]
    fresh = commands_of(opening)
    assert len(fresh) == 2
    assert all(line.startswith("python3 -m venv .venv && .venv/bin/pip install") for line in fresh)
    assert "demo_data/cluster_widths.ecsv" in fresh[0]
    assert "pytest" in fresh[1]
    first = opening.split("\n\n")[1]
    assert "effective temperature" in first
    assert [line[3:] for line in README.splitlines() if line.startswith("## ")] == [
        "Your own table",
        "Reading the result",
    ]


def test_every_command_and_option_that_the_readme_shows_exists():
    shown = [line for line in commands_of(README) if line.startswith("specsolve ")]
    shown += re.findall(r"`(specsolve [^`]+)`", README)
    assert len(shown) >= 6
    for line in shown:
        words = shlex.split(line, comments=True)
        context = click.Context(group)
        command = group
        for word in words[1:]:
            if not isinstance(command, click.Group):
                break
            command = command.get_command(context, word)
            assert command is not None, line
        options = {name for parameter in command.params for name in (*parameter.opts, *parameter.secondary_opts)}
        for word in words:
            if word.startswith("--"):
                assert word in options, (line, word)


@pytest.mark.parametrize("name", list(COMMANDS))
def test_every_command_has_a_help_that_starts_with_examples_or_a_sentence(name):
    command = group.get_command(click.Context(group), name)
    assert command is not None
    assert (command.help or "").strip()


def test_versions_agree_and_no_upper_caps():
    with (ROOT / "pyproject.toml").open("rb") as stream:
        project = tomllib.load(stream)["project"]
    assert re.fullmatch(r"\d+\.\d+\.\d+", specsolve.__version__)
    wanted = [*project["dependencies"], *itertools.chain(*project["optional-dependencies"].values())]
    assert not [text for text in wanted if "<" in text or "==" in text or "~=" in text]
    assert all(">=" in text for text in wanted if not text.startswith("specsolve"))


def test_no_machine_path_or_host_in_tracked_text():
    done = subprocess.run(["git", "-C", str(ROOT), "ls-files", "-z"], capture_output=True, text=True)
    if done.returncode != 0:  # an unpacked sdist: nothing is tracked
        files = [path for path in ROOT.rglob("*") if path.suffix in (".py", ".md", ".toml")]
    else:
        files = [ROOT / name for name in done.stdout.split("\0") if name]
    # Spelled in pieces, so that this file does not contain them.
    forbidden = ["/" + "root/", "/" + "home/", "pypi" + ".org", "index" + "-url", "/" + "work/"]
    for path in files:
        if not path.is_file() or path.suffix in (".npy", ".npz", ".gz", ".png", ".fits"):
            continue
        text = path.read_text(encoding="utf-8", errors="replace")
        for piece in forbidden:
            assert piece not in text, (path.relative_to(ROOT), piece)
