"""Plans: the TOML file that says what is to be run and what is asked.

Everything that is wrong with a plan is said at once, a line each; nothing is run before that.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from generators.errors import InputError
from generators.files.text import parse_toml
from generators.settings import Between, Setting
from generators.streams import digest
from harness.plan.entrants import LIMIT_KEYS, read_learners, read_limits
from harness.plan.expansion import DATASETS, expand, n_variables, notes_on
from harness.plan.messages import Faults, Section, unknown
from harness.plan.telling import KNOWLEDGE
from harness.records import Bound, Condition, Learner, Limits, Requirement
from harness.scorers.registry import MEASURES

SECTIONS = ("title", "seed", "networks", "data", "learner", "limits", "requirement", "gate")
DEFAULT_ROWS = (250, 500, 1_000, 2_000, 4_000, 8_000, 16_000)
DEFAULT_BOUNDS = ("skeleton_recall >= 0.7", "skeleton_precision >= 0.8")
MAX_CELLS = 1 << 33  # of one dataset: 8 GiB at a byte per cell
MAX_TEXT = 1 << 20  # characters of a plan

TITLE = Setting("title", str)
SEED = Setting("seed", int, 1, bounds=Between(0))
ROWS = Setting("rows", int, bounds=Between(1))
_BETWEEN = Between(0, 1, inside=True)
REQUIREMENT = (
    Setting("assurance", float, 0.8, bounds=_BETWEEN),
    Setting("confidence", float, 0.95, bounds=_BETWEEN),
    Setting("precision", float, 0.1, bounds=_BETWEEN),
    Setting("max_rows", int, 100_000, bounds=Between(1)),
    Setting("max_runs", int, 20_000, bounds=Between(3_000)),
    Setting("max_failed", float, 0.05, bounds=Between(0, 1)),
)
MARGIN = Between(0, inside=True)
GATE = (
    Setting("slower", float, None, bounds=Between(1, inside=True)),
    Setting("reference", str, None),
    Setting("error", float, 0.001, bounds=_BETWEEN),
)
_ONE_AT_MOST = ("share", "0 or 1")
_BOUND = re.compile(r"\s*([A-Za-z_]+)\s*(>=|<=|>|<)\s*(\S+)\s*")


@dataclass(frozen=True, slots=True)
class Plan:
    """A plan that has been read: valid, with its factors crossed and its learners found.

    Parameters
    ----------
    title : str
    seed : int
    text : str
        The TOML as it was read.
    path : Path or None
    digest : str
        Of the text, as hexadecimal.
    conditions : tuple of Condition
    rows : tuple of int
        Increasing.
    learners : tuple of Learner
    limits : Limits
        The plan's own; each learner carries those that hold for it.
    requirement : Requirement
    gate : mapping or None
        `margin` (measure -> least difference that matters), `slower`, `reference`, `error`; those given,
        and the default of `error`.
    notes : tuple of str
        What the reader of the plan should know though nothing is wrong, a sentence each.
    """

    title: str
    seed: int
    text: str
    path: Path | None
    digest: str
    conditions: tuple[Condition, ...]
    rows: tuple[int, ...]
    learners: tuple[Learner, ...]
    limits: Limits
    requirement: Requirement
    gate: Mapping[str, Any] | None
    notes: tuple[str, ...]


def read_plan(path: Path | str) -> Plan:
    """Read a plan from its file.

    Raises
    ------
    InputError
        If the file cannot be read, or with one line per fault in it.
    """
    path = Path(path)
    try:
        content = path.read_bytes()
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"{path}: cannot be read: {reason}") from None
    try:
        text = content.decode("utf-8-sig")  # some editors put a byte order mark in front
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise InputError(f"{path.name}:{line}: is not UTF-8 text, as TOML must be") from None
    return parse_plan(text, path)


def parse_plan(text: str, path: Path | None = None) -> Plan:
    """Read a plan from its text.

    Parameters
    ----------
    text : str
        TOML.
    path : Path, optional
        Where it stands: its name begins each message, its folder is that to which the plan's paths are
        relative. Without one, messages say "plan" and paths are relative to the working folder.

    Raises
    ------
    InputError
        With one line per fault: file, key, what was found, what is accepted. Items of lists and
        [[learner]] tables are counted from 1.

    Examples
    --------
    >>> plan = parse_plan('''
    ... [networks]
    ... variables = [12, 24]
    ... [[learner]]
    ... method = "no-arcs"
    ... ''')
    >>> len(plan.conditions), [dict(condition.factors)["variables"] for condition in plan.conditions]
    (2, [12, 24])
    >>> expected_runs(plan)  # 2 conditions of 100 networks, 7 row counts, 1 learner
    1400
    """
    name = "plan" if path is None else path.name
    folder = Path() if path is None else path.parent
    faults = Faults(name)
    top = Section("", _parsed(text, name), faults)
    _refuse_long_integers("", top.content, faults)
    faults.stop()
    top.refuse_unknown(SECTIONS)
    title = top.read(TITLE)
    seed = top.read(SEED, SEED.default)
    networks, data, limits = top.table("networks"), top.table("data"), top.table("limits")
    requirement, gate = top.table("requirement"), top.table("gate")

    conditions = expand(networks, data, seed, folder)
    rows = _read_rows(data)
    data.refuse_unknown((ROWS.name, DATASETS.name, KNOWLEDGE))
    own_limits = read_limits(limits)
    limits.refuse_unknown(LIMIT_KEYS)
    before = len(faults.lines)
    learners = read_learners(top.content.get("learner", []), own_limits, folder, faults)
    labels = [learner.label for learner in learners] if len(faults.lines) == before else None
    asked = _read_requirement(requirement)
    margins = _read_gate(gate, labels) if "gate" in top.content else None
    _check_size(data, ROWS.name, rows, conditions)
    _check_size(requirement, "max_rows", (asked.max_rows,), conditions)
    faults.stop()
    return Plan(
        title=title or Path(name).stem,
        seed=seed,
        text=text,
        path=path,
        digest=digest("plan", text).hex(),
        conditions=conditions,
        rows=rows,
        learners=learners,
        limits=Limits(**own_limits),
        requirement=asked,
        gate=margins,
        notes=tuple(notes_on(conditions)),
    )


def expected_runs(plan: Plan) -> int:
    """Return the number of runs of a plan: datasets, times row counts, times learners."""
    datasets = sum(condition.replicates * condition.datasets for condition in plan.conditions)
    return datasets * len(plan.rows) * len(plan.learners)


def _parsed(text: str, name: str) -> dict[str, Any]:
    if len(text) > MAX_TEXT:
        raise InputError(f"{name}: is {len(text)} characters long; at most {MAX_TEXT} are accepted")
    return parse_toml(text, name)


def _refuse_long_integers(place: str, value: Any, faults: Faults) -> None:
    """Note whole numbers beyond 64 bits: TOML has none, and no message could print the longest."""
    if isinstance(value, dict):
        section = Section(place, value, faults)
        for key, item in value.items():
            _refuse_long_integers(section.where(key), item, faults)
    elif isinstance(value, list):
        for position, item in enumerate(value, start=1):
            _refuse_long_integers(f"{place}[{position}]", item, faults)
    elif isinstance(value, int) and not -(2**63) <= value < 2**63:
        faults.add(place, "must be a number of at most 64 bits")


def _read_rows(data: Section) -> tuple[int, ...]:
    if ROWS.name not in data.content:
        return DEFAULT_ROWS
    rows: dict[int, None] = {}
    for position, item in data.items(ROWS.name):
        number = data.parse(ROWS, item, position=position)
        if number in rows:
            data.fault(ROWS.name, f"{number} stands twice; row counts must differ", position)
        elif number is not None:
            rows[number] = None
    return tuple(sorted(rows))


def _check_size(section: Section, key: str, rows: tuple[int, ...], conditions: tuple[Condition, ...]) -> None:
    most = max(rows, default=0)
    widest = max((n_variables(condition) for condition in conditions), default=0)
    if most * widest > MAX_CELLS:
        section.fault(
            key,
            f"{most} rows of {widest} variables are {most * widest} cells; at most {MAX_CELLS} are accepted",
        )


def _read_requirement(section: Section) -> Requirement:
    section.refuse_unknown(("bounds", *(setting.name for setting in REQUIREMENT)))
    numbers = {setting.name: section.read(setting, setting.default) for setting in REQUIREMENT}
    texts = section.content.get("bounds", list(DEFAULT_BOUNDS))
    if not isinstance(texts, list) or not texts:
        section.fault("bounds", f"must be a list such as {list(DEFAULT_BOUNDS)}, got {texts!r}")
        texts = []
    bounds = (_read_bound(section, position, text) for position, text in enumerate(texts, start=1))
    return Requirement(tuple(bound for bound in bounds if bound is not None), **numbers)


def _read_bound(section: Section, position: int, text: Any) -> Bound | None:
    parts = _BOUND.fullmatch(text) if isinstance(text, str) else None
    value = _number(parts[3]) if parts else None
    if parts is None or value is None:
        what = f"must be MEASURE, one of >= <= > <, and a number, as in {DEFAULT_BOUNDS[0]!r}, got {text!r}"
        section.fault("bounds", what, position)
        return None
    if parts[1] not in MEASURES:
        section.fault("bounds", unknown(f"measure {parts[1]!r}", parts[1], sorted(MEASURES)), position)
        return None
    limits = Between(0, 1 if MEASURES[parts[1]].unit in _ONE_AT_MOST else math.inf)
    if value not in limits:
        section.fault(
            "bounds", f"must name a value that {parts[1]} can have, {limits}, got {text!r}", position
        )
        return None
    return Bound(parts[1], parts[2], value)


def _number(text: str) -> float | None:
    try:
        value = float(text)
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def _read_gate(section: Section, labels: list[str] | None) -> dict[str, Any]:
    section.refuse_unknown(("margin", *(setting.name for setting in GATE)))
    gate = {
        setting.name: value
        for setting in GATE
        if (value := section.read(setting, setting.default)) is not None
    }
    margin = section.table("margin")
    gate["margin"] = {}
    for measure, value in margin.content.items():
        if measure in MEASURES:
            gate["margin"][measure] = margin.parse(Setting(measure, float, bounds=MARGIN), value)
        else:
            margin.fault(measure, unknown(f"measure {measure!r}", measure, sorted(MEASURES)))
    if labels is not None and "reference" in gate and gate["reference"] not in labels:
        section.fault("reference", unknown(f"label {gate['reference']!r}", gate["reference"], labels))
    return gate
