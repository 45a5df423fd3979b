"""The packaged demonstration: an invented survey of an apiary's winter losses."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

from generators.errors import InputError
from generators.files.atomic import atomic_write

PLAN_NAME = "apiary.toml"


def write_demo_plan(folder: Path) -> Path:
    """Put the demonstration's plan into a folder, made if needed, and return its path.

    A plan that is there already is kept, so that the demonstration resumes, unless it is another one.

    Raises
    ------
    InputError
        If the folder cannot be made, or another plan of that name stands in it.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{folder}: the folder cannot be made ({error.strerror})") from None
    text = resources.files("harness.studies").joinpath(PLAN_NAME).read_text(encoding="utf-8")
    path = folder / PLAN_NAME
    if path.exists() and path.read_text(encoding="utf-8", errors="replace") != text:
        raise InputError(
            f"{path}: is another plan than the demonstration's; it was left as it is. Use --folder"
        )
    atomic_write(path, text)
    return path
