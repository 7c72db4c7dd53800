"""How a run can end: exit codes, one line on stderr, what is said and what is not."""

import logging
import os
import re
import signal
import subprocess
import sys
import textwrap
import time
import warnings

import click
import pytest
from click.testing import CliRunner

from viewshed.cli import options
from viewshed.cli.options import Program, Progress, table, verbosity, verbosity_options
from viewshed.errors import DataError, MemoryLimitError, OutputError, ViewshedWarning

ENVIRONMENT = {**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)}


def run(body, *args):
    """Run a command that does what `body` does."""

    @click.group(cls=Program)
    def program():
        pass

    @program.command()
    @verbosity_options
    @click.pass_context
    def work(ctx):
        body(ctx)

    return CliRunner().invoke(program, ["work", *args])


def fail_with(error):
    def body(_):
        raise error

    return body


@pytest.mark.parametrize(
    ("error", "line"),
    [
        (DataError("dem.tif: is empty; copy it again"), "Error: dem.tif: is empty; copy it again"),
        (OutputError("out: is full;\n free some room"), "Error: out: is full; free some room"),
        (MemoryLimitError("needs 9 GB"), "Error: needs 9 GB"),
        (
            ZeroDivisionError("by\nzero"),
            "Error: unexpected ZeroDivisionError: by zero; run again with -vv to see where it "
            "comes from",
        ),
        (
            OSError(5, "Input/output error"),
            "Error: unexpected OSError: [Errno 5] Input/output error; run again with -vv to see "
            "where it comes from",
        ),
        (
            MemoryError(),
            "Error: unexpected MemoryError; run again with -vv to see where it comes from",
        ),
    ],
)
def test_a_failed_run_is_one_line_and_exit_code_1(error, line):
    result = run(fail_with(error))
    assert (result.exit_code, result.stdout) == (1, "")
    assert result.stderr == line + "\n"


def test_a_traceback_is_shown_with_vv_only():
    for flags, shown in (([], False), (["-v"], False), (["-vv"], True), (["-v", "-v"], True)):
        result = run(fail_with(DataError("bad")), *flags)
        assert result.exit_code == 1
        assert ("Traceback" in result.stderr) is shown
        assert result.stderr.endswith("Error: bad\n")


def test_ctrl_c_is_exit_code_130_without_a_traceback():
    result = run(fail_with(KeyboardInterrupt()), "-vv")
    assert result.exit_code == 130
    assert result.stderr.strip() == "Interrupted; nothing is left half written."


@pytest.mark.parametrize("flags", [(), ("-q",)])
def test_warnings_are_single_lines_told_once(flags):
    def body(_):
        for _ in range(2):
            warnings.warn("the range reaches\n past the grid", ViewshedWarning, stacklevel=1)

    result = run(body, *flags)
    assert (result.exit_code, result.stdout) == (0, "")
    assert result.stderr == "Warning: the range reaches past the grid\n"


@pytest.mark.parametrize(
    ("flags", "heard"),
    [(["-q"], "e"), ([], "ie"), (["-v"], "die"), (["-vv"], "dilie"), (["-v", "-q"], "ie")],
)
def test_how_much_is_told(flags, heard):
    def body(_):
        log = logging.getLogger("viewshed.test")
        log.debug("d")
        log.info("i")
        library = logging.getLogger("library")
        library.setLevel(logging.DEBUG)
        library.info("li")
        log.error("e")

    assert run(body, *flags).stderr.replace("\n", "") == heard


def test_verbosity_counts():
    def body(ctx):
        click.echo(verbosity(ctx))

    told = [run(body, *flags).stdout.strip() for flags in ([], ["-v"], ["-vv"], ["-q"])]
    assert told == ["0", "1", "2", "-1"]


@pytest.fixture
def clock(monkeypatch):
    """A clock that stands still unless it is set."""

    class Clock:
        now = 0.0

        def monotonic(self):
            return self.now

    found = Clock()
    monkeypatch.setattr(options, "time", found)
    return found


def test_progress_writes_a_line_now_and_then_in_a_log(clock):
    def body(ctx):
        with Progress("Looking", hidden=verbosity(ctx) < 0) as progress:
            progress(1, 10)
            clock.now += 11
            progress(4, 10)
            progress(5, 10)
            progress(0, 0)

    assert run(body).stderr == "Looking: 40 %, about 22 s left\n"
    assert run(body, "-q").stderr == ""


@pytest.mark.parametrize(
    ("seconds", "said"),
    [
        (30, "about 60 s left"),
        (60, "about 2 minutes left"),
        (1200, "about 40 minutes left"),
        (3600, "about 2.0 hours left"),
    ],
)
def test_time_left_goes_by_the_pace_since_the_first_word(clock, seconds, said):
    """What was done before it, and how long that took, says nothing of the pace."""

    def body(ctx):
        clock.now = 1000.0
        with Progress("Looking") as progress:
            clock.now += 500.0
            progress(10, 100)
            clock.now += seconds
            progress(40, 100)

    lines = run(body).stderr.splitlines()
    assert lines[-1] == f"Looking: 40 %, {said}"
    assert lines[0] == "Looking: 10 %"  # no pace yet


def test_progress_is_a_bar_with_the_time_left_on_a_terminal():
    pty = pytest.importorskip("pty")
    leader, follower = pty.openpty()
    code = (
        "import time\n"
        "from viewshed.cli.options import Progress\n"
        "with Progress('Looking') as p:\n"
        "    for i in range(5):\n"
        "        p(i, 4)\n"
        "        time.sleep(0.6)\n"
    )
    subprocess.run(
        [sys.executable, "-c", code], stderr=follower, check=True, timeout=60, env=ENVIRONMENT
    )
    os.close(follower)
    shown = os.read(leader, 100_000).decode()
    os.close(leader)
    assert "Looking" in shown
    assert re.search(r"\b(25|50|75)%  00:00:0\d", shown)
    assert "100%" in shown


def test_table_has_two_columns():
    assert table([("Visible", "1 km²"), ("k", "0.13")]) == "Visible  1 km²\nk        0.13"
    assert table([]) == ""


@pytest.mark.skipif(os.name != "posix", reason="sends a POSIX signal")
@pytest.mark.parametrize(
    "work",
    [
        "time.sleep(30)",
        # One call in C that lets other threads run but looks at no signal, like a large copy.
        "hashlib.pbkdf2_hmac('sha256', b'x', b'y', 60_000_000)",
    ],
)
def test_ctrl_c_ends_the_process_within_a_second_whatever_it_does(work):
    code = textwrap.dedent(
        f"""
        import hashlib, time
        from viewshed.cli import main as program

        @program.cli.command()
        def work():
            print("working", flush=True)
            {work}

        program.main(["work"])
        """
    )
    with subprocess.Popen(
        [sys.executable, "-c", code], stdout=-1, stderr=-1, text=True, env=ENVIRONMENT
    ) as process:
        assert process.stdout.readline() == "working\n"
        time.sleep(0.2)
        began = time.monotonic()
        process.send_signal(signal.SIGINT)
        _, said = process.communicate(timeout=20)
        took = time.monotonic() - began
    assert took < 1.5
    assert process.returncode == 130, said
    assert "Traceback" not in said
    assert "Interrupted" in said
