"""The entry of the command `arcassay`."""

from __future__ import annotations

import os
import sys

from ._own import bind_packages

# Before numpy is imported by anything: learners are timed on one thread, and so is what surrounds them.
_THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMEXPR_NUM_THREADS")


def main() -> None:
    """Run the command line."""
    foreign = bind_packages()
    if foreign is not None:
        sys.stderr.write(f"arcassay: {foreign}\n")
        sys.exit(2)
    for name in _THREAD_VARIABLES:
        os.environ.setdefault(name, "1")
    from harness.cli.main import main as run

    run()
