"""Fixtures that several test folders share."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, settings

settings.register_profile(
    "project", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow], max_examples=60
)
settings.load_profile("project")

ROOT = Path(__file__).parent.parent


def pytest_sessionstart(session: pytest.Session) -> None:
    """Share the compilation of the kernels between the processes of a parallel run.

    Each would else compile most of them by itself, at the same time as the others.
    """
    if hasattr(session.config, "workerinput"):
        import harness.scorers.structure  # noqa: F401  (registers its warm-up)
        from generators.compiled import warm_all
        from harness.learners.builtin import BUILT_IN, built_in

        for name in BUILT_IN:
            built_in(name)
        warm_all()


@pytest.fixture
def rng() -> np.random.Generator:
    """Give a generator with a fixed seed."""
    return np.random.default_rng(20261201)


@pytest.fixture(scope="session")
def known_network_file() -> Callable[[str], Path]:
    """Give the path of a published network's file, or skip where the files are absent.

    They are not part of the project: set ARCASSAY_NETWORKS to a folder that holds them.
    """
    folder = Path(os.environ.get("ARCASSAY_NETWORKS", ROOT.parent / "shared" / "networks"))

    def find(name: str) -> Path:
        path = folder / name
        if not path.exists():
            pytest.skip(f"{name} is not at hand; set ARCASSAY_NETWORKS to a folder that has it")
        return path

    return find
