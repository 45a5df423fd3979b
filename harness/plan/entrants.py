"""From the [[learner]] tables to learners: a list is a value, `vary` makes one learner per value."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from generators.errors import InputError
from generators.settings import REQUIRED, Between, Setting
from harness.learners.builtin import BUILT_IN
from harness.learners.sources import Resolved, resolve
from harness.plan.expansion import CHANCE_DENSITY
from harness.plan.messages import Faults, Section, unknown
from harness.plan.recipes import learner_key
from harness.records import Learner, Limits

MAX_LEARNERS = 200
LONGEST_LABEL = 80
LEAST_MEMORY_MB = 512  # below, importing numerical libraries hangs in their allocator instead of failing

METHOD = Setting("method", str)
SOURCE = Setting("source", str)
LABEL = Setting("label", str)
LIMITS = (
    Setting("seconds", float, bounds=Between(0, inside=True)),
    Setting("memory_mb", int, bounds=Between(LEAST_MEMORY_MB)),
    Setting("threads", int, bounds=Between(1, 1024)),
)
LIMIT_KEYS = tuple(setting.name for setting in LIMITS)
LEARNER_KEYS = ("method", "source", "label", "vary", *LIMIT_KEYS)


def read_limits(section: Section) -> dict[str, Any]:
    """Return the limits that a table gives, by name."""
    return {limit.name: value for limit in LIMITS if (value := section.read(limit)) is not None}


def read_learners(
    tables: Any, limits: Mapping[str, Any], folder: Path, faults: Faults
) -> tuple[Learner, ...]:
    """Return the learners of a plan, those of one table in the order of its `vary` lists.

    Parameters
    ----------
    tables : Any
        What the plan has under `learner`.
    limits : mapping
        The plan's own; a learner's keys go before them, and what the learner declares comes after.
    folder : Path
        The plan's folder, to which paths are relative.
    faults : Faults
        Where what is wrong is noted.
    """
    if not isinstance(tables, list) or not all(isinstance(table, dict) for table in tables):
        faults.add("learner", "must be written as [[learner]], one such table per learner")
        return ()
    if not tables:
        faults.add("learner", "at least one [[learner]] is needed")
    learners: list[tuple[str, Learner]] = []
    for number, table in enumerate(tables, start=1):
        section = Section(f"learner[{number}]", table, faults)
        for learner in _read_one(section, limits, folder):
            _refuse_twins(section, learner, learners)
            learners.append((section.place, learner))
        if len(learners) > MAX_LEARNERS:
            faults.add("learner", f"more than {MAX_LEARNERS} learners; at most {MAX_LEARNERS} are accepted")
            break
    return tuple(learner for _, learner in learners)


def _read_one(section: Section, limits: Mapping[str, Any], folder: Path) -> list[Learner]:
    own_limits, label = read_limits(section), _read_label(section)
    found = _find(section, folder)
    if found is None:
        return []
    before = len(section.faults.lines)
    declared = found.specification.settings
    section.refuse_unknown((*LEARNER_KEYS, *declared))
    fixed = {name: section.read(setting) for name, setting in declared.items() if name in section.content}
    varied = _varied(section, declared)
    for name, setting in declared.items():
        if setting.default is REQUIRED and name not in fixed and name not in varied:
            section.fault(name, f"is required by {found.method!r}: {setting.accepted}")
    if len(section.faults.lines) > before:
        return []
    effective = Limits(**{"threads": found.specification.threads, **limits, **own_limits})
    learners = []
    for values in itertools.product(*varied.values()):
        one = dict(zip(varied, values, strict=True))
        settings = _that_count(found, {**fixed, **one})
        stem = label or _name(found.method, _that_count(found, fixed))
        learners.append(_learner(found, _name(stem, one), settings, effective))
    return learners


def _read_label(section: Section) -> str | None:
    label = section.read(LABEL)
    if label is not None and not (0 < len(label) <= LONGEST_LABEL and label.isprintable() and label.strip()):
        section.fault("label", f"must be 1 to {LONGEST_LABEL} printable characters, got {label!r}")
    return label or None


def _find(section: Section, folder: Path) -> Resolved | None:
    has = [key for key in ("method", "source") if key in section.content]
    if len(has) != 1:
        what = "gives both a method and a source; one is accepted" if has else "needs a method or a source"
        section.faults.add(section.place, what)
        return None
    method, source = section.read(METHOD), section.read(SOURCE)
    if method is not None and method not in BUILT_IN:
        section.fault("method", unknown(f"method {method!r}", method, sorted(BUILT_IN)))
        return None
    if method is None and source is None:
        return None
    try:
        return resolve(method, source, folder)
    except InputError as error:
        section.faults.add_all(section.where(has[0]), error)
        return None


def _varied(section: Section, declared: Mapping[str, Setting]) -> dict[str, list[Any]]:
    table = section.table("vary")
    table.refuse_unknown(declared)
    varied = {}
    for name in (key for key in table.content if key in declared):
        if name in section.content:
            table.fault(name, f"is given outside vary too, as {section.content[name]!r}")
        if not isinstance(table.content[name], list):
            table.fault(name, f"must be a list of values, got {table.content[name]!r}")
            continue
        varied[name] = [table.parse(declared[name], item, position=at) for at, item in table.items(name)]
    n_learners = math.prod(len(values) for values in varied.values())
    if n_learners > MAX_LEARNERS:
        section.fault("vary", f"makes {n_learners} learners; at most {MAX_LEARNERS} are accepted")
    return varied


def _learner(found: Resolved, label: str, settings: dict[str, Any], limits: Limits) -> Learner:
    specification = found.specification
    revision = specification.revision
    return Learner(
        label=label,
        method=found.method,
        source=found.source,
        settings=settings,
        returns=specification.returns,
        directions=specification.directions,
        revision=revision,
        origin_digest=found.digest,
        limits=limits,
        key=learner_key(found.method, settings, revision=revision, origin_digest=found.digest),
        baseline=specification.baseline,
    )


def _refuse_twins(section: Section, learner: Learner, others: list[tuple[str, Learner]]) -> None:
    for place, other in others:
        if other.label == learner.label:
            section.fault("label", f"{learner.label!r} is the label of {place} already; labels must differ")
        if other.key == learner.key:
            what = f"is the method of {place} with the same settings; labels and limits make no other learner"
            section.faults.add(section.place, what)


def _that_count(found: Resolved, settings: Mapping[str, Any]) -> dict[str, Any]:
    """Leave out what is the default, but for the density of `chance`: not to give one means another one."""
    declared = found.specification.settings
    kept = CHANCE_DENSITY if found.source is None and found.method == "chance" else None
    return {
        name: value for name, value in settings.items() if name == kept or value != declared[name].default
    }


def _name(stem: str, settings: Mapping[str, Any]) -> str:
    return ", ".join([stem, *(f"{name} {_shown(value)}" for name, value in settings.items())])


def _shown(value: Any) -> str:
    text = str(value).lower() if isinstance(value, bool) else str(value)
    return text if text.isprintable() else repr(value)
