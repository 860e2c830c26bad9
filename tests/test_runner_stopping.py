"""A request to stop is answered wherever it strikes, in a fresh interpreter."""

from __future__ import annotations

import subprocess
import sys

import pytest

START = """
import signal, time
from modepair.runner.cli.stopping import StoppedError, stopping_in_order
class Going:
    def __del__(self):
        signal.raise_signal(signal.{name})
"""
LOST_WHERE_NOTHING_CAN_BE_RAISED = """
with stopping_in_order():
    going = Going()
    del going
    time.sleep(30)
"""
TURNED_INTO_ANOTHER_ERROR = """
with stopping_in_order():
    try:
        signal.raise_signal(signal.{name})
    except StoppedError:
        raise SyntaxError("of Python's own making") from None
"""
LOST_IN_A_TIDYING_UP = """
with stopping_in_order():
    try:
        raise ValueError
    except ValueError:
        going = Going()
        del going
        time.sleep(0.2)
        print("tidied up")
    time.sleep(30)
"""
NOTED = """
with stopping_in_order():
    try:
        signal.raise_signal(signal.{name})
    except StoppedError as error:
        error.add_note("some is kept")
        raise
"""


@pytest.mark.parametrize(
    ("name", "status", "words"),
    [
        ("SIGINT", 130, "interrupted"),
        ("SIGTERM", 143, "ended by a request to terminate"),
        ("SIGHUP", 129, "ended, since its terminal was closed"),
    ],
)
@pytest.mark.parametrize(
    ("program", "output", "left"),
    [
        (LOST_WHERE_NOTHING_CAN_BE_RAISED, "", "nothing was written"),
        (TURNED_INTO_ANOTHER_ERROR, "", "nothing was written"),
        (LOST_IN_A_TIDYING_UP, "tidied up\n", "nothing was written"),
        (NOTED, "", "some is kept"),
    ],
)
def test_it_is_answered_once(
    program: str, output: str, left: str, name: str, status: int, words: str
) -> None:
    done = subprocess.run(
        [sys.executable, "-c", (START + program).format(name=name)],
        capture_output=True,
        text=True,
        check=False,
        timeout=20,
    )
    assert done.stderr == f"modepair: {words}; {left}\n"
    assert done.stdout == output
    assert done.returncode == status


def test_other_errors_stay_what_they_are() -> None:
    program = START.format(name="SIGINT") + "with stopping_in_order():\n    raise ValueError('own')\n"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=False)
    assert done.stderr.endswith("ValueError: own\n")
    assert done.returncode == 1
