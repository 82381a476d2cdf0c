"""The command group: exit codes, one line an error, tracebacks only on demand, lazy imports."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time

import click
import pytest

from specsolve import __version__, errors
from specsolve.cli import main as cli
from specsolve.errors import InputError, OutOfGridError


def call(*arguments, **keywords):
    return subprocess.run(
        [sys.executable, "-m", "specsolve", *arguments], capture_output=True, text=True, timeout=120, **keywords
    )


@pytest.fixture
def failing(monkeypatch):
    """Make ``specsolve columns`` raise what the test wants."""

    def arrange(error):
        @click.command()
        def columns():
            raise error

        monkeypatch.setattr(cli.LazyGroup, "get_command", lambda self, context, name: columns)

    return arrange


def test_version_and_help():
    assert call("--version").stdout == f"specsolve, version {__version__}\n"
    text = call("--help").stdout
    for name in cli.COMMANDS:
        assert name in text
    assert "130 interrupted" in text


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["nonsense"], "No such command 'nonsense'. Commands: solve, measure"),
        (["columns", "--nonsense"], "No such option"),
        (["columns", "nonsense"], "is not one of"),
        (["--quiet", "--verbose", "columns"], "exclude each other"),
    ],
)
def test_usage_errors_are_one_line_and_exit_2(arguments, words):
    done = call(*arguments)
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1
    assert words in done.stderr


def test_no_arguments_shows_the_help():
    done = call()
    assert done.returncode == 2
    assert "Examples:" in done.stderr


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (InputError("no such file"), 3, "no such file"),
        (OutOfGridError("logg", 6.0, 0.0, 5.0), 4, "logg = 6 lies outside the grid (0 to 5)"),
        (KeyboardInterrupt(), 130, "interrupted"),
        (OSError(28, "No space left on device", "x.ecsv"), 1, "x.ecsv: the disk is full"),
        (PermissionError(13, "Permission denied", "x.ecsv"), 1, "x.ecsv: permission denied"),
        (ZeroDivisionError("division by zero"), 1, "unexpected ZeroDivisionError"),
        (MemoryError(), 1, "out of memory"),
    ],
)
def test_every_error_ends_as_one_line_and_its_code(failing, capsys, error, code, words):
    failing(error)
    assert cli.run(["columns"]) == code
    shown = capsys.readouterr()
    assert words in shown.err
    assert shown.err.strip().count("\n") == 0
    assert "Traceback" not in shown.err


def test_debug_shows_the_traceback(failing, capsys):
    failing(InputError("no such file"))
    assert cli.run(["--debug", "columns"]) == 3
    assert "Traceback" in capsys.readouterr().err


def test_exit_codes_are_fixed():
    codes = (
        errors.EXIT_SOLVED,
        errors.EXIT_UNEXPECTED,
        errors.EXIT_USAGE,
        errors.EXIT_NO_INPUT,
        errors.EXIT_UNSOLVED,
        errors.EXIT_INTERRUPTED,
    )
    assert codes == (0, 1, 2, 3, 4, 130)


def test_columns_as_text_and_json():
    assert "equivalent_width " in call("columns", "input").stdout
    done = call("columns", "lines", "--json")
    assert done.returncode == 0
    assert '"schema": 1' in done.stdout


def test_a_closed_pipe_is_quiet():
    done = subprocess.run(
        f"{sys.executable} -m specsolve columns | head -1", shell=True, capture_output=True, text=True, timeout=120
    )
    assert "Traceback" not in done.stderr


def test_import_is_fast_and_lean():
    script = (
        "import time; start = time.process_time(); import specsolve, sys; took = time.process_time() - start;"
        "heavy = {'numpy', 'scipy', 'astropy', 'numba', 'matplotlib', 'specutils', 'rich', 'click'} & set(sys.modules);"
        "print(took, sorted(heavy), len(sys.modules))"
    )
    took, rest = min(
        subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60).stdout.split(" ", 1)
        for _ in range(2)
    )
    assert rest.startswith("[]")
    assert float(took) < 0.3  # s, the bar of the design


def test_names_of_the_package_load_when_used():
    import specsolve

    assert "solve" in dir(specsolve)
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        specsolve.nonsense  # noqa: B018 - the access is the test


def listen_to_ctrl_c():
    """In a child: SIGINT as a shell in the foreground leaves it; jobs in the background start with it ignored."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_signals_end_with_130(number):
    script = (
        "import time, click\n"
        "from specsolve.cli import main as cli\n"
        "@click.command()\n"
        "def waiting():\n"
        "    print('ready', flush=True)\n"
        "    time.sleep(60)\n"
        "cli.LazyGroup.get_command = lambda self, context, name: waiting\n"
        "cli.main()\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", script, "columns"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "PYTHONUNBUFFERED": "1"},
        preexec_fn=listen_to_ctrl_c,
    ) as process:
        try:
            assert process.stdout.readline() == "ready\n"
            time.sleep(0.1)
            process.send_signal(number)
            _, words = process.communicate(timeout=30)
        finally:
            process.kill()
    assert process.returncode == 130
    assert words.strip() == "specsolve: interrupted"
