"""How commands speak: JSON or text on standard output, everything else on standard error."""

from __future__ import annotations

import json
import os
import secrets
import shutil
import sys
from collections.abc import Callable
from typing import Any, TypeVar

import click

SEED_BITS = 32
Command = TypeVar("Command", bound=Callable[..., Any])


def shared_options(command: Command) -> Command:
    """Add the options that every command has."""
    command = click.option("--quiet", is_flag=True, help="Print nothing but the result and errors.")(command)
    return click.option(
        "--json", "as_json", is_flag=True, help="One JSON document on standard output, nothing else there."
    )(command)


def examples(*lines: str) -> str:
    """Return the epilog of a command's help: its examples, one a line."""
    return "\b\nExamples:\n" + "\n".join(f"  {line}" for line in lines)


def print_json(document: Any) -> None:
    """Print one JSON document; NaN and infinities are bugs here, not output."""
    click.echo(json.dumps(document, indent=1, ensure_ascii=False, allow_nan=False))


def say(text: str, *, quiet: bool = False) -> None:
    """Print a remark on standard error."""
    if not quiet:
        click.echo(text, err=True)


def seed_or_drawn(seed: int | None, *, quiet: bool) -> int:
    """Return the given seed, or one that is drawn and said, so that what follows can be repeated."""
    if seed is None:
        seed = secrets.randbits(SEED_BITS)
        say(f"Seed {seed}", quiet=quiet)
    return seed


def complain(text: str) -> None:
    """Print an error, each line with the program's name."""
    for line in text.splitlines() or [""]:
        click.echo(f"arcassay: {line}", err=True)


def width() -> int:
    """Return the columns to fill: the terminal's, at most 100; 80 where there is none."""
    return min(100, shutil.get_terminal_size((80, 24)).columns)


def use_colour() -> bool:
    """Whether standard output is a terminal that shows colours (https://no-color.org is heeded)."""
    return sys.stdout.isatty() and "NO_COLOR" not in os.environ and os.environ.get("TERM") != "dumb"
