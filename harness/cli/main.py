"""The command group. Each command's module is imported only when the command is used.

Nothing heavy is imported here: `arcassay --help` is to answer at once.
"""

from __future__ import annotations

import importlib
import os
import sys
from collections.abc import Mapping
from typing import Any

import click

Entry = tuple[str, str]  # where the command is, and its line in the overview

SECTIONS: Mapping[str, Mapping[str, Entry]] = {
    "Plan and run a study": {
        "demo": ("harness.cli.study:demo", "The packaged demonstration, with its report."),
        "draft": ("harness.cli.study:draft", "Write a commented plan to start from."),
        "check": ("harness.cli.study:check", "Validate a plan; say how many runs and how long."),
        "run": ("harness.cli.study:run", "Run what the ledger lacks of a plan; again to resume."),
        "report": ("harness.cli.study:report", "Write the report of a study, and its first screen."),
        "export": ("harness.cli.study:export", "Write a table of a study as CSV or Parquet."),
        "status": ("harness.cli.study:status", "Say what a study has, lacks, and how runs ended."),
        "rerun": ("harness.cli.study:rerun", "Do one stored run again, in the foreground."),
    },
    "Use a learner": {
        "learn": ("harness.cli.learners:learn", "Apply a learner to a real data file."),
        "score": ("harness.cli.learners:score", "Compute all measures between two graph or network files."),
    },
    "Look up": {
        "list": ("harness.cli.lookup:list_", "What is registered: settings, defaults, references."),
        "network": ("harness.cli.lookup:network", "Generate, show, convert and sample networks."),
    },
}


class LazyGroup(click.Group):
    """A group whose commands are imported when they are used."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Return the names, in the order of the sections."""
        return [name for section in SECTIONS.values() for name in section]

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Import and return a command."""
        for section in SECTIONS.values():
            if cmd_name in section:
                module, _, attribute = section[cmd_name][0].partition(":")
                command: click.Command = getattr(importlib.import_module(module), attribute)
                return command
        return None

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Find the command; an unknown one is answered with the nearest name."""
        name = args[0] if args else ""
        if args and not name.startswith("-") and self.get_command(ctx, name) is None:
            import difflib

            close = difflib.get_close_matches(name, self.list_commands(ctx), n=1)
            hint = f" Did you mean {close[0]!r}?" if close else " See arcassay --help."
            ctx.fail(f"there is no command {name!r}.{hint}")
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """List the commands by section, without importing them."""
        for title, section in SECTIONS.items():
            with formatter.section(title):
                formatter.write_dl([(name, line) for name, (_, line) in section.items()])


@click.group(
    cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.version_option(package_name="arcassay", message="%(version)s")
def cli() -> None:
    r"""Rehearse a Bayesian-network structure-learning study on synthetic data.

    Before real data is touched: how many rows, which learner, how long - each with its uncertainty.
    Start with "arcassay demo", or with "arcassay draft --variables 12 -o plan.toml".

    \b
    Exit codes: 0 done; 1 a check says no; 2 the input is wrong;
    3 the machine stopped it (run again to resume); 130 interrupted.
    """


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and exit."""
    sys.exit(run_command(arguments))


def run_command(arguments: list[str] | None = None) -> int:
    """Run the command line and return the exit code."""
    from harness.cli.output import complain

    try:
        result: Any = cli.main(arguments, prog_name="arcassay", standalone_mode=False)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.ClickException as error:
        error.show()
        return 2
    except (click.Abort, KeyboardInterrupt):
        complain("interrupted.")
        return 130
    except BrokenPipeError:
        # Whoever read our output has enough of it; nothing may be flushed to it at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
        return 0
    except Exception as error:
        code = _expected(error)
        if code is None:
            raise
        complain(str(error))
        return code
    return result if isinstance(result, int) else 0


def _expected(error: Exception) -> int | None:
    """Return the exit code of an error that is no bug of ours."""
    from generators.errors import InputError

    if isinstance(error, InputError):
        return 2
    from harness.records import MachineStop

    if isinstance(error, MachineStop):
        return 3
    from generators.files.atomic import MACHINE_ERRORS

    if isinstance(error, OSError) and error.errno in MACHINE_ERRORS:
        return 3
    return None
