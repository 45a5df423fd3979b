"""Faults of a plan: collected, not raised one by one, each a line that says where, what and what instead."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from generators.errors import InputError
from generators.settings import Setting, nearest

LONGEST_FAULT = 500
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


@dataclass(slots=True)
class Faults:
    """What is wrong with one plan, in the order in which it was found.

    Parameters
    ----------
    file : str
        The plan's file name, which begins each line.
    """

    file: str
    _lines: dict[str, None] = field(default_factory=dict)

    def add(self, where: str, what: str) -> None:
        """Note a fault at a key; the same line is kept once.

        Examples
        --------
        >>> faults = Faults("plan.toml")
        >>> faults.add("networks.replicats", "unknown key. Did you mean 'replicates'?")
        >>> faults.lines
        ("plan.toml: networks.replicats: unknown key. Did you mean 'replicates'?",)
        """
        end = "" if what.endswith((".", "?")) else "."
        line = f"{self.file}: {where}: {what}{end}"
        if len(line) > LONGEST_FAULT:
            line = f"{line[:LONGEST_FAULT]}..."
        self._lines[line] = None

    @property
    def lines(self) -> tuple[str, ...]:
        """The faults so far, a complete line each."""
        return tuple(self._lines)

    def add_all(self, where: str, error: InputError) -> None:
        """Note every fault of an `InputError` at a key."""
        for fault in error.faults:
            self.add(where, " ".join(fault.split()))

    def stop(self) -> None:
        """Raise all faults as one `InputError`, if there are any."""
        if self.lines:
            raise InputError(*self.lines)


@dataclass(frozen=True, slots=True)
class Section:
    """One table of a plan with its place, for reading its keys and saying what is wrong with them.

    Parameters
    ----------
    place : str
        "networks", "learner[2]" (counted from 1), or "" for the top of the plan.
    content : mapping
    faults : Faults
    """

    place: str
    content: Mapping[str, Any]
    faults: Faults

    def where(self, key: str, position: int | None = None) -> str:
        """Return the place of a key, or of one item of its list (counted from 1)."""
        own = key if _BARE_KEY.fullmatch(key) else json.dumps(key)
        item = "" if position is None else f"[{position}]"
        return f"{self.place}.{own}{item}" if self.place else f"{own}{item}"

    def fault(self, key: str, what: str, position: int | None = None) -> None:
        """Note a fault at a key."""
        self.faults.add(self.where(key, position), what)

    def read(self, setting: Setting, default: Any = None) -> Any:
        """Return the value of a setting's key in its declared type; `default` where absent or wrong."""
        if setting.name not in self.content:
            return default
        return self.parse(setting, self.content[setting.name], default=default)

    def parse(self, setting: Setting, value: Any, *, position: int | None = None, default: Any = None) -> Any:
        """Return a value in the declared type of a setting, or note the fault and return `default`."""
        try:
            return setting.parse(value)
        except ValueError as error:
            self.fault(setting.name, str(error), position)
            return default

    def items(self, key: str) -> list[tuple[int | None, Any]]:
        """Return the items of a key's list with their positions, or its single value without one."""
        value = self.content[key]
        if not isinstance(value, list):
            return [(None, value)]
        if not value:
            self.fault(key, "a list must have at least one item, got []")
        return list(enumerate(value, start=1))

    def refuse_unknown(self, known: Iterable[str]) -> None:
        """Note a fault for every key that is not among the known ones."""
        known = list(known)
        for key in self.content:
            if key not in known:
                self.fault(key, unknown("key", key, known))

    def table(self, key: str) -> Section:
        """Return a table within this one; empty where it is absent or is something else."""
        value = self.content.get(key, {})
        if not isinstance(value, dict):
            self.fault(key, f"must be a table, got {value!r}")
            value = {}
        return Section(self.where(key), value, self.faults)


def unknown(kind: str, word: str, known: Iterable[str]) -> str:
    """Say that a word is not known, with the nearest known one, or all where none is near.

    Examples
    --------
    >>> unknown("key", "sed", ["seed", "title"])
    "unknown key. Did you mean 'seed'?"
    >>> unknown("key", "x", ["seed", "title"])
    'unknown key; accepted: seed, title.'
    """
    hint = nearest(word, known)
    return f"unknown {kind}.{hint}" if hint else f"unknown {kind}; accepted: {', '.join(known)}."
