"""The start of the command: able to stop in order before the rest of it is imported."""

from __future__ import annotations

import gc
import os
import sys

from modepair.runner.cli.stopping import stopping_in_order

__all__ = ["main"]


def main() -> None:
    """Import the command line and run it."""
    # Imports make many objects and hardly any garbage: looking for it takes a tenth of a short run.
    gc.set_threshold(100_000, 20, 20)
    # Where a stream is closed there is none at all, and the next file that is opened would get its place.
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))  # noqa: SIM115
    with stopping_in_order():
        from modepair.runner.cli.app import main as run

        run()
