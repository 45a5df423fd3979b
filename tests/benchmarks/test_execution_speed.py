"""What the harness itself costs: per run of a built-in learner, per run in a process of its own, at a limit.

Start-up (importing, compiling) is left out: the clock starts when the first runs have ended. Everything
else is in: drawing, sampling, handing out, scoring, storing. The figures are in `extra_info`.
"""

from __future__ import annotations

import os
import statistics
import struct
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from harness.execution.progress import Progress
from harness.plan.schema import parse_plan
from harness.studies.reading import read_study, runs_table
from harness.studies.running import Watcher, run_plan

pytestmark = pytest.mark.benchmark

ROWS = [round(250 * 64 ** (k / 20)) for k in range(21)]  # 250 to 16,000
LEARNERS = '''
import mmap
import struct
import time

from generators.graph import Graph


def empty(data):
    return Graph.from_edges(data.names)


def lives(data, *, path: str):
    """Write down when the call began and, again and again, that it still lives."""
    with open(path, "r+b") as file:
        note = mmap.mmap(file.fileno(), 16)
        began = time.monotonic()
        while True:
            struct.pack_into("dd", note, 0, began, time.monotonic())
'''


class Clock(Watcher):
    """Take the time from the first runs that ended to the last."""

    def advanced(self, progress: Progress) -> None:
        """Note the time of the first and of the newest batch."""
        now = time.perf_counter()
        if progress.done and not hasattr(self, "began"):
            self.began, self.n_before = now, progress.done
        self.ended, self.n_after = now, progress.done

    @property
    def seconds_per_run(self) -> float:
        """Wall time per run after the first batch."""
        return (self.ended - self.began) / (self.n_after - self.n_before)


def timed_run(folder: Path, learner: str, *, replicates: int, rows: list[int], n_workers: int = 1) -> Clock:
    (folder / "learners.py").write_text(LEARNERS)
    networks = f"[networks]\nvariables = 12\nreplicates = {replicates}"
    text = f"{networks}\n[data]\nrows = {rows}\n[[learner]]\n{learner}\n"
    ledger = folder / f"{time.monotonic_ns()}.ledger"
    clock = Clock()
    run_plan(parse_plan(text, folder / "plan.toml"), ledger, n_workers=n_workers, watcher=clock)
    clock.ledger = ledger
    return clock


def median_seconds(action: Callable[[], Any], rounds: int = 15) -> float:
    times = []
    for _ in range(rounds):
        began = time.perf_counter()
        action()
        times.append(time.perf_counter() - began)
    return statistics.median(times)


def note(benchmark: Any, **figures: float) -> None:
    benchmark.extra_info.update({name: round(value, 4) for name, value in figures.items()})
    benchmark.extra_info["load"] = round(os.getloadavg()[0], 2)


def test_a_run_of_a_built_in_learner(benchmark: Any, tmp_path: Path) -> None:
    """Wall time per run of a learner that does nothing; beside it, a cross-tabulation in pandas."""
    frame = pd.DataFrame(np.random.default_rng(1).integers(0, 3, size=(1000, 2)), columns=["a", "b"])
    yardstick = median_seconds(lambda: pd.crosstab(frame["a"], frame["b"]))

    clock = benchmark.pedantic(
        timed_run, (tmp_path, 'method = "no-arcs"'), {"replicates": 100, "rows": ROWS}, rounds=1
    )

    per_run = clock.seconds_per_run
    note(benchmark, ms_per_run=1e3 * per_run, crosstab_ms=1e3 * yardstick, ratio=per_run / yardstick)


def test_a_run_in_a_process_of_its_own(benchmark: Any, tmp_path: Path) -> None:
    """Wall time per isolated run; beside it, starting an interpreter that only imports pandas."""
    yardstick = median_seconds(lambda: subprocess.run([sys.executable, "-c", "import pandas"], check=True), 5)

    clock = benchmark.pedantic(
        timed_run, (tmp_path, 'source = "learners.py:empty"'), {"replicates": 20, "rows": ROWS[::3]}, rounds=1
    )

    per_run = clock.seconds_per_run
    note(benchmark, ms_per_run=1e3 * per_run, interpreter_ms=1e3 * yardstick, ratio=per_run / yardstick)


def test_how_long_a_learner_lives_beyond_its_limit(benchmark: Any, tmp_path: Path) -> None:
    """Time from a limit to the learner's last sign of life; beside it, what a sleep of that time is over."""
    limit = 0.2
    pulse = tmp_path / "pulse"

    def overshoot() -> float:
        pulse.write_bytes(bytes(16))
        learner = f'source = "learners.py:lives"\npath = "{pulse}"\nseconds = {limit}'
        timed_run(tmp_path, learner, replicates=1, rows=[100])
        began, last = struct.unpack("dd", pulse.read_bytes())
        return float(last - began - limit)

    yardstick = median_seconds(lambda: time.sleep(limit), 5) - limit
    found = [overshoot() for _ in range(4)]
    found.append(benchmark.pedantic(overshoot, rounds=1))

    note(
        benchmark,
        median_overshoot_ms=1e3 * statistics.median(found),
        greatest_overshoot_ms=1e3 * max(found),
        sleep_ms=1e3 * yardstick,
        ratio=statistics.median(found) / max(yardstick, 1e-6),
    )


def test_two_workers_beside_one(benchmark: Any, tmp_path: Path) -> None:
    """How many times as many runs two workers do; beside it, what two processes gain on numpy alone."""
    learner = 'method = "hill-climbing"\nrestarts = 20'
    sizes = {"replicates": 40, "rows": [4000, 8000, 16000]}
    alone = timed_run(tmp_path, learner, **sizes, n_workers=1).seconds_per_run

    clock = benchmark.pedantic(timed_run, (tmp_path, learner), {**sizes, "n_workers": 2}, rounds=1)

    work = [sys.executable, "-c", "import numpy as np; a = np.arange(1e6)\nfor _ in range(300): np.sin(a)"]
    one = median_seconds(lambda: [subprocess.run(work, check=True) for _ in range(2)], 3)
    two = median_seconds(lambda: [p.wait() for p in [subprocess.Popen(work) for _ in range(2)]], 3)
    gain, possible = alone / clock.seconds_per_run, one / two
    mean_ms = 1e3 * runs_table(read_study(clock.ledger))["wall_seconds"].mean()
    note(benchmark, gain=gain, possible_gain=possible, ratio=gain / possible, learner_ms=mean_ms)
