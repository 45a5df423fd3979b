"""The import package `arcassay`, in surroundings that have a `harness` of their own."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

import arcassay


def in_python(code: str, folder: Path, *options: str) -> subprocess.CompletedProcess[str]:
    """Run code in a fresh interpreter whose working folder is `folder`."""
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    return subprocess.run(
        [sys.executable, *options, "-c", code], cwd=folder, env=environment, capture_output=True, text=True
    )


@pytest.mark.parametrize("name", sorted(arcassay.__all__))
def test_every_public_name_can_be_had(name: str) -> None:
    """What `arcassay` lists, it has."""
    assert getattr(arcassay, name) is not None


def test_an_unknown_name_is_an_attribute_error() -> None:
    """A name that is not public is refused as Python does."""
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        arcassay.nonsense  # noqa: B018


def test_a_folder_called_harness_does_not_disturb(tmp_path: Path) -> None:
    """A repository with a plain folder `harness` imports arcassay as any other."""
    (tmp_path / "harness").mkdir()
    (tmp_path / "harness" / "notes.txt").write_text("the repository's own\n")

    result = in_python("import arcassay; print(arcassay.Graph.__module__)", tmp_path)

    assert result.stdout == "generators.graph\n", result.stderr


def test_a_foreign_package_called_harness_is_refused_in_one_line(tmp_path: Path) -> None:
    """Where another package `harness` comes first on the path, the import says so, and from where."""
    (tmp_path / "harness").mkdir()
    (tmp_path / "harness" / "__init__.py").write_text("")

    result = in_python("import arcassay; arcassay.Graph", tmp_path)

    last = result.stderr.splitlines()[-1]
    assert result.returncode == 1
    assert last.startswith("ImportError: the package 'harness' would be imported from ")
    assert str(tmp_path) in last


def test_the_command_refuses_a_foreign_harness_with_exit_code_2(tmp_path: Path) -> None:
    """The command ends with one line and exit code 2 instead of a traceback."""
    (tmp_path / "harness").mkdir()
    (tmp_path / "harness" / "__init__.py").write_text("")

    result = in_python("from arcassay._command import main; main()", tmp_path)

    assert result.returncode == 2
    assert result.stderr.startswith("arcassay: the package 'harness'")
    assert len(result.stderr.splitlines()) == 1
