"""The key `knowledge` of a plan's [data] table: its levels, checked and brought into one form."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from generators.errors import InputError
from generators.settings import Between, Setting
from generators.streams import canonical_json
from harness.knowledge import Knowledge, read_statements
from harness.plan.messages import Section
from harness.plan.recipes import given_network
from harness.plan.telling import KNOWLEDGE, short_text

ARCS = Setting("arcs", float, 0.0, bounds=Between(0, 1))
EXCLUDED = Setting("excluded", float, 0.0, bounds=Between(0, 1))
WAVES = Setting("stages", int, bounds=Between(2))
WRONG = Setting("wrong", float, 0.0, bounds=Between(0, 1))
FILE = Setting("file", str)
KEYS = ("arcs", "excluded", "stages", "wrong", "file")
Networks = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class ToldLevel:
    """One level of what is told.

    Parameters
    ----------
    effective : mapping
        See `harness.plan.telling`; empty where nothing is told.
    text : str
        What tables show.
    section : Section
        Where the plan says it.
    """

    effective: Mapping[str, Any]
    text: str
    section: Section


def read_told(data: Section, folder: Path, *, is_given: bool) -> list[ToldLevel]:
    """Return the levels of what is told, equal ones once; one of nothing where the plan has no such key.

    Parameters
    ----------
    data : Section
        The table [data]; what is wrong with the key is noted there.
    folder : Path
        The plan's folder, to which paths are relative.
    is_given : bool
        Whether the networks are given: only of those can a file know the variables.
    """
    levels: dict[str, ToldLevel] = {}
    for position, item in data.items(KNOWLEDGE) if KNOWLEDGE in data.content else [(None, {})]:
        if not isinstance(item, dict):
            what = f"must be a table such as {{arcs = 0.2, stages = true}}, or a list of them, got {item!r}"
            data.fault(KNOWLEDGE, what, position)
            continue
        level = _read_one(Section(data.where(KNOWLEDGE, position), item, data.faults), folder, is_given)
        levels.setdefault(canonical_json(level.effective), level)
    return list(levels.values())


def check_told(told: ToldLevel, networks: Sequence[Networks]) -> None:
    """Note where what a file says names other variables than a network has, or contradicts itself."""
    if "statements" not in told.effective:
        return
    for level in networks:
        try:
            Knowledge.of(given_network(level).names, **told.effective["statements"])
        except InputError as error:
            where = "" if len(networks) == 1 else f", for {network_name(level)}"
            own = (f"{told.section.content['file']}{where}: {fault}" for fault in error.faults)
            told.section.faults.add_all(told.section.where("file"), InputError(*own))


def notes_on_told(networks: Networks, effective: Mapping[str, Any]) -> list[str]:
    """Say which statements of a file do not hold in a given network."""
    if "statements" not in effective:
        return []
    network = given_network(networks)
    known, arrow = Knowledge.of(network.names, **effective["statements"]), network.graph.arrow
    strange, denied = int((known.arcs & ~arrow).sum()), int((known.excluded & arrow).sum())
    if not strange and not denied:
        return []
    return [
        f"what is told of {network_name(networks)} is not all true: {strange} arcs are told that it has not, "
        f"and {denied} are excluded that it has."
    ]


def network_name(networks: Networks) -> str:
    """Return what messages call a given network."""
    return str(networks["published"]) if "published" in networks else Path(networks["file"]).name


def _read_one(section: Section, folder: Path, is_given: bool) -> ToldLevel:
    section.refuse_unknown(KEYS)
    if FILE.name in section.content:
        return _read_file(section, folder, is_given)
    level = {own.name: value for own in (ARCS, EXCLUDED) if (value := section.read(own, own.default))}
    if "stages" in section.content and (stages := _stages(section)):
        level["stages"] = stages
    if wrong := section.read(WRONG, WRONG.default):
        if level:
            level["wrong"] = wrong
        elif not any(key in section.content for key in ("arcs", "excluded", "stages")):
            section.fault("wrong", "is a share of what is told, and nothing is told here")
    return ToldLevel(level, short_text(level), section)


def _stages(section: Section) -> bool | int | None:
    value = section.content["stages"]
    if isinstance(value, bool):
        return value
    try:
        return int(WAVES.parse(value))
    except ValueError:
        section.fault("stages", f"must be true, false or {WAVES.accepted}, got {value!r}")
        return None


def _read_file(section: Section, folder: Path, is_given: bool) -> ToldLevel:
    nothing = ToldLevel({}, short_text({}), section)
    for key in section.content:
        if key in KEYS and key != FILE.name:
            section.fault(key, "is not for what a file says, which is told as it stands")
    path = section.read(FILE)
    if path is None:
        return nothing
    if not is_given:
        section.fault(FILE.name, "is for given networks; drawn ones have variables of their own")
        return nothing
    absolute = os.path.abspath(os.path.join(folder, path))
    try:
        statements = read_statements(absolute)
    except InputError as error:
        shown = InputError(*(fault.replace(absolute, path) for fault in error.faults))
        section.faults.add_all(section.where(FILE.name), shown)
        return nothing
    return ToldLevel({"statements": statements}, f"file {path}", section) if statements else nothing
