"""From [networks] and `data.knowledge` to conditions: factors crossed, unused keys dropped, equals merged."""

from __future__ import annotations

import functools
import itertools
import json
import math
import os
from collections.abc import Collection, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from generators.catalogue import CATALOGUE
from generators.cpts import CPT_FAMILIES, parse_states
from generators.errors import InputError
from generators.settings import REQUIRED, Between, Registered, Registry, Setting
from generators.streams import canonical_json, digest
from generators.topologies import TOPOLOGIES, expected_arcs
from harness.plan.messages import Section, unknown
from harness.plan.recipes import (
    BASE_KEYS,
    draw_graph,
    draw_network,
    given_network,
    given_notes,
    is_given,
    network_key,
)
from harness.plan.telling import KNOWLEDGE, sentence
from harness.plan.told_levels import check_told, notes_on_told, read_told
from harness.records import Condition, Learner

MAX_CONDITIONS = 2_000
MAX_VARIABLES = 5_000
MAX_COUNT = 100_000  # replicates or datasets
GIVEN_DATASETS = 100  # of a given network, where the dataset is the unit, as 100 replicates are of drawn ones
CHANCE_DENSITY = "mean_parents"  # the setting of `chance` that a condition fills in where the plan has none
DENSITY_DRAWS = 200

GIVEN_KEYS = ("file", "published")
VARIABLES = Setting("variables", int, bounds=Between(2, MAX_VARIABLES))
REPLICATES = Setting("replicates", int, 100, bounds=Between(1, MAX_COUNT))
DATASETS = Setting("datasets", int, 1, bounds=Between(1, MAX_COUNT))

Networks = dict[str, Any]


def expand(networks: Section, data: Section, seed: int, folder: Path) -> tuple[Condition, ...]:
    """Return the conditions of a plan, in the order of its lists, the last key fastest.

    Parameters
    ----------
    networks, data : Section
        The tables [networks] and [data]; what is wrong with them is noted there.
    seed : int
        The plan's: the first network of each condition is drawn, to see that it can be.
    folder : Path
        The plan's folder, to which paths are relative.

    Returns
    -------
    tuple of Condition
        Empty if [networks] had faults.
    """
    before = len(networks.faults.lines)
    given = [key for key in GIVEN_KEYS if key in networks.content]
    replicates = 1 if given else networks.read(REPLICATES, REPLICATES.default)
    found = _given(networks, given, folder) if given else _generated(networks)
    is_sound = len(networks.faults.lines) == before
    datasets = data.read(DATASETS, GIVEN_DATASETS if given else DATASETS.default)
    told_levels = read_told(data, folder, is_given=bool(given))
    if not is_sound:
        return ()
    levels = list({canonical_json(level): level for level in found}.values())
    for level in levels:
        _try_out(networks, level, seed)
    if given:
        _refuse_twins(networks, given[0], levels)
    for told in told_levels:
        check_told(told, levels)
    if len(levels) * len(told_levels) > MAX_CONDITIONS:
        data.fault(KNOWLEDGE, _too_many(len(levels) * len(told_levels)))
        return ()
    return tuple(
        Condition(
            level,
            {KNOWLEDGE: told.effective} if told.effective else {},
            {**factors, KNOWLEDGE: told.text} if len(told_levels) > 1 else factors,
            replicates,
            datasets,
        )
        for level, factors in zip(levels, _factors(levels, networks.content), strict=True)
        for told in told_levels
    )


def _too_many(n_levels: int) -> str:
    return f"the lists cross to {n_levels} conditions; at most {MAX_CONDITIONS} are accepted"


def settings_for(learner: Learner, condition: Condition) -> dict[str, Any]:
    """Return the settings with which a learner is called on the datasets of a condition.

    They are those of the plan, but for `chance`: its arcs are as many as the condition's networks have
    on average, unless the plan says how many. That is a matter of the call, not of the learner's key: the
    dataset's key already says from which networks it comes.

    Parameters
    ----------
    learner : Learner
    condition : Condition

    Returns
    -------
    dict
        Those that differ from the defaults, in their declared types.
    """
    settings = dict(learner.settings)
    if learner.source is None and learner.method == "chance":
        settings.setdefault(CHANCE_DENSITY, mean_parents(condition.networks))
    return settings


def mean_parents(networks: Mapping[str, Any]) -> float:
    """Return the arcs per variable that the networks of a condition have on average.

    Exact for a given network and for random orders after the cap; for any other topology the mean of
    200 graphs drawn for this purpose, the same on every machine.

    Examples
    --------
    >>> round(12 * mean_parents({"topology": "random-order", "variables": 12, "max_parents": 3}), 1)
    16.3
    """
    if is_given(networks):
        network = given_network(networks)
        return network.graph.n_edges / network.graph.n_variables
    return _drawn_mean_parents(canonical_json(networks))


@functools.lru_cache(maxsize=MAX_CONDITIONS)
def _drawn_mean_parents(networks_json: str) -> float:
    networks: Networks = json.loads(networks_json)
    variables: int = networks["variables"]
    if networks["topology"] == "random-order":
        own = {key: networks[key] for key in TOPOLOGIES["random-order"].settings if key in networks}
        return expected_arcs(variables, **own) / variables
    keys = [digest("density draw", {"networks": networks, "draw": draw}) for draw in range(DENSITY_DRAWS)]
    arcs = [draw_graph(networks, key).n_edges for key in keys]
    return sum(arcs) / len(arcs) / variables


def notes_on(conditions: Iterable[Condition]) -> list[str]:
    """Say what a reader should know: of network files, of a cap on the parents, of what is told."""
    conditions = list(conditions)
    notes: list[str] = []
    for condition in conditions:
        own = condition.networks
        notes += given_notes(own)
        notes += notes_on_told(own, condition.data.get(KNOWLEDGE, {}))
        if own.get("topology") != "random-order":
            continue
        asked, expected = own["variables"] * own["mean_parents"], own["variables"] * mean_parents(own)
        if asked - expected >= 0.05:
            notes.append(
                f"random-order networks of {own['variables']} variables: {expected:.1f} arcs expected after "
                f"the cap of {own['max_parents']} parents, {asked:.1f} asked for."
            )
    said = sentence(condition.data for condition in conditions)
    return list(dict.fromkeys([*notes, *([said] if said else [])]))


def default_mean_parents(variables: int) -> float:
    """Return the density of a plan that names none: 1.5 up to 12 variables, 1.2 above.

    Below seven variables it is less, so that at most half of all pairs are arcs on average.

    Examples
    --------
    >>> [default_mean_parents(p) for p in (2, 5, 12, 13)]
    [0.25, 1.0, 1.5, 1.2]
    """
    return min(1.5 if variables <= 12 else 1.2, (variables - 1) / 4)


def n_variables(condition: Condition) -> int:
    """Return the number of variables of a condition's networks."""
    if condition.is_given:
        return given_network(condition.networks).graph.n_variables
    return int(condition.networks["variables"])


def _given(section: Section, given: Sequence[str], folder: Path) -> list[Networks]:
    for key in section.content:
        if key == "replicates":
            section.fault(key, "is for drawn networks; of a given one, say how many in data.datasets")
        elif key not in GIVEN_KEYS:
            known = key in BASE_KEYS or key in _all_settings()
            why = f"is for drawn networks; {given[0]!r} gives one"
            section.fault(
                key, why if known else unknown("key", key, (*GIVEN_KEYS, *BASE_KEYS, *_all_settings()))
            )
    if len(given) > 1:
        section.fault(given[1], f"{given[0]!r} is there too; a plan takes one of them")
    if given[0] == "file":
        return [{"file": path} for path in _files(section, folder)]
    return [{"published": name} for name in _names(section, "published", CATALOGUE, "network")]


def _files(section: Section, folder: Path) -> list[str]:
    paths = []
    for position, text in section.items("file"):
        path = section.parse(Setting("file", str), text, position=position)
        if path is None:
            continue
        absolute = os.path.abspath(os.path.join(folder, path))
        if not os.path.isfile(absolute):
            section.fault("file", f"no such file: {path!r}", position)
            continue
        try:
            given_network({"file": absolute})
        except InputError as error:
            shown = InputError(*(fault.replace(absolute, path) for fault in error.faults))
            section.faults.add_all(section.where("file", position), shown)
        paths.append(absolute)
    return paths


def _generated(section: Section) -> list[Networks]:
    before = len(section.faults.lines)
    if "variables" not in section.content:
        section.fault("variables", f"is required: {VARIABLES.accepted}, or a list of such numbers")
    levels: dict[str, list[Any]] = {
        "variables": _values(section, "variables", [VARIABLES]) if "variables" in section.content else [],
        "topology": _names(section, "topology", TOPOLOGIES, "topology", "random-order"),
        "states": _states(section),
        "cpts": _names(section, "cpts", CPT_FAMILIES, "CPT family", "dirichlet"),
    }
    users = [TOPOLOGIES[name] for name in levels["topology"]] + [
        CPT_FAMILIES[name] for name in levels["cpts"]
    ]
    for key in section.content:
        if key not in levels and key != "replicates":
            levels[key] = _setting_values(section, key, users)
    if len(section.faults.lines) > before:
        return []
    n_levels = math.prod(len(own) for own in levels.values())
    if n_levels > MAX_CONDITIONS:
        section.faults.add(section.place, _too_many(n_levels))
        return []
    return [
        _effective(section, dict(zip(levels, level, strict=True)))
        for level in itertools.product(*levels.values())
    ]


def _setting_values(section: Section, key: str, users: list[Registered]) -> list[Any]:
    settings = [user.settings[key] for user in users if key in user.settings]
    if settings:
        return _values(section, key, settings)
    owners = [
        name for registry in (TOPOLOGIES, CPT_FAMILIES) for name in registry if key in registry[name].settings
    ]
    if owners:
        names = ", ".join(repr(user.name) for user in users)
        section.fault(
            key, f"is a setting of {', '.join(map(repr, owners))}, which no condition uses ({names})"
        )
    else:
        section.fault(key, unknown("key", key, (*BASE_KEYS, "replicates", *GIVEN_KEYS, *_all_settings())))
    return []


def _values(section: Section, key: str, settings: Sequence[Setting]) -> list[Any]:
    """Return the levels of a key, each accepted by all who use it."""
    values = []
    for position, item in section.items(key):
        for setting in settings:
            section.parse(setting, item, position=position)
        values.append(item)
    return values


def _names(
    section: Section, key: str, known: Mapping[str, Any], kind: str, default: str | None = None
) -> list[str]:
    names = []
    for position, item in section.items(key) if key in section.content else [(None, default)]:
        if isinstance(item, str) and item in known:
            names.append(item)
        elif isinstance(item, str):
            section.fault(key, unknown(f"{kind} {item!r}", item, sorted(known)), position)
        else:
            section.fault(key, f"must be the name of a {kind}, got {item!r}", position)
    return names


def _states(section: Section) -> list[int | str]:
    levels: list[int | str] = []
    for position, item in section.items("states") if "states" in section.content else [(None, "2-3")]:
        try:
            low, high = parse_states(item)
        except ValueError as error:
            section.fault("states", str(error), position)
        else:
            levels.append(low if low == high else f"{low}-{high}")
    return levels


def _effective(section: Section, level: Mapping[str, Any]) -> Networks:
    """Return the keys that count at one level: the base keys, and the settings of its two functions."""
    effective = {key: level[key] for key in BASE_KEYS}
    for registered in (TOPOLOGIES[level["topology"]], CPT_FAMILIES[level["cpts"]]):
        for name, setting in registered.settings.items():
            value = level.get(name, setting.default)
            if name == "mean_parents" and name not in level:
                value = default_mean_parents(level["variables"])
            if value is REQUIRED:
                section.fault(name, f"is required by {registered.name!r}: {setting.accepted}")
            elif value is not None:
                effective[name] = setting.parse(value)
    return effective


def _refuse_twins(section: Section, key: str, levels: Sequence[Networks]) -> None:
    """Refuse a network that is given twice: its content is its identity, so its runs would be the same."""
    first: dict[bytes, str] = {}
    for level in levels:
        content = given_network(level).key()
        if content in first:
            section.fault(key, f"{Path(level[key]).name!r} is the same network as {first[content]!r}")
        first.setdefault(content, Path(level[key]).name)


def _try_out(section: Section, networks: Networks, seed: int) -> None:
    """Draw the first network of a condition: what its settings rule out together comes to light here."""
    try:
        draw_network(networks, network_key(seed, networks, 0))
    except InputError as error:
        for fault in error.faults:
            key, _, rest = fault.partition(": ")
            if key in networks:
                section.fault(key, rest)
            else:
                section.faults.add(section.place, fault)


def _factors(levels: Sequence[Networks], written: Collection[str]) -> list[dict[str, Any]]:
    """Return what tables show of each condition: the keys of the plan that have more than one value.

    A default that follows another key, as the density does the number of variables, is no factor.
    """
    shown = _with_short_paths(levels)
    values: dict[str, set[str]] = {}
    for level in shown:
        for key, value in level.items():
            values.setdefault(key, set()).add(canonical_json(value))
    varied = {key for key, found in values.items() if len(found) > 1 and key in written}
    return [{key: value for key, value in level.items() if key in varied} for level in shown]


def _with_short_paths(levels: Sequence[Networks]) -> Sequence[Networks]:
    """Put a file's stem for its path, or as much more of the path as tells the files apart."""
    paths = [Path(level["file"]) for level in levels if "file" in level]
    for n_parts in range(1, max((len(path.parts) for path in paths), default=0) + 1):
        for ends in ([path.with_suffix("") for path in paths], paths):
            short = ["/".join(path.parts[-n_parts:]) for path in ends]
            if len(set(short)) == len(short):
                return [{"file": own} for own in short]
    return levels


def _all_settings() -> list[str]:
    registries: tuple[Registry, ...] = (TOPOLOGIES, CPT_FAMILIES)
    return list(dict.fromkeys(key for own in registries for name in own for key in own[name].settings))
