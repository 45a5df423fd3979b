"""Networks as JSON, in a small versioned format of this project.

    {"format": "arcassay network", "version": 1, "variables": [
      {"name": "rain", "states": ["no", "yes"], "parents": [], "rows": [[0.8, 0.2]]},
      {"name": "wet", "states": ["no", "yes"], "parents": ["rain"], "rows": [[0.9, 0.1], [0.2, 0.8]]}]}

`rows` holds one list per joint state of the parents, the first parent's state slowest.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from itertools import islice, product
from math import prod
from typing import Any

import numpy as np

from generators.errors import InputError
from generators.files.assembly import build_network, is_probability, normalised, row_label, size_fault
from generators.files.text import shown
from generators.network import Cpt, Network, check_states
from generators.settings import nearest

FORMAT = "arcassay network"
VERSION = 1


def parse_network_json(text: str, where: str) -> tuple[Network, tuple[str, ...]]:
    """Read a network from the text of a JSON file.

    Parameters
    ----------
    text : str
    where : str
        The file's name, for messages.

    Returns
    -------
    network : Network
    notes : tuple of str
        One per table that had rows to renormalise.

    Raises
    ------
    InputError
        ``FILE:LINE:COLUMN: ...`` where the text is no JSON, else ``FILE: variables[2].rows[0]: ...``
        (positions count from 0).

    Examples
    --------
    >>> network, notes = parse_network_json('''{"format": "arcassay network", "version": 1, "variables": [
    ...     {"name": "rain", "states": ["no", "yes"], "parents": [], "rows": [[0.8, 0.2]]}]}''', "tiny.json")
    >>> network.cpts["rain"].p.tolist(), notes
    ([0.8, 0.2], ())
    """
    reader = _Reader(where)
    top = reader.object("", _parsed(text, where), ("format", "version", "variables"))
    if top["format"] != FORMAT:
        raise reader.fault("format", f"expected {FORMAT!r}, found {_found(top['format'])}.")
    if top["version"] != VERSION or isinstance(top["version"], bool):
        raise reader.fault(
            "version",
            f"expected {VERSION}, found {_found(top['version'])}; another version may have written this.",
        )
    items = reader.list("variables", top["variables"])
    if not items:
        raise reader.fault("variables", "expected at least one variable, found none.")
    variables = [
        reader.object(f"variables[{k}]", item, ("name", "states", "parents", "rows"))
        for k, item in enumerate(items)
    ]
    states = reader.states(variables)
    cpts, notes, taken = [], [], 0
    for k, variable in enumerate(variables):
        cpt, note = reader.table(f"variables[{k}]", variable, states, taken)
        taken += cpt.p.size
        cpts.append(cpt)
        if note:
            notes.append(f"{where}: variables[{k}].rows: {note}")
    network = build_network(states, cpts, lambda k, message: reader.fault(f"variables[{k}].parents", message))
    return network, tuple(notes)


class _Object(tuple[tuple[str, Any], ...]):
    """The pairs of a JSON object as they stand in the text, repeated keys included."""


def _parsed(text: str, where: str) -> Any:
    def refuse(constant: str) -> Any:
        raise ValueError(f"{constant} is not a JSON number")

    try:
        return json.loads(text, object_pairs_hook=_Object, parse_constant=refuse)
    except json.JSONDecodeError as error:
        raise InputError(f"{where}:{error.lineno}:{error.colno}: not JSON: {error.msg}.") from None
    except ValueError as error:  # NaN, or a whole number too long to convert
        raise InputError(f"{where}: not JSON: {str(error).partition(';')[0]}.") from None
    except RecursionError:
        raise InputError(f"{where}: not a network: lists within lists, too deep to read.") from None


def _found(value: Any) -> str:
    if isinstance(value, _Object):
        return "an object"
    if isinstance(value, list):
        return f"a list of {len(value)}"
    return shown(value) if isinstance(value, str) else json.dumps(value)


class _Reader:
    """Typed access to parsed JSON, with the path of each value in the faults."""

    def __init__(self, where: str) -> None:
        self.where = where

    def fault(self, path: str, message: str) -> InputError:
        return InputError(f"{self.where}: {path}: {message}" if path else f"{self.where}: {message}")

    def object(self, path: str, value: Any, keys: tuple[str, ...]) -> dict[str, Any]:
        if not isinstance(value, _Object):
            raise self.fault(
                path, f"expected an object with the keys {', '.join(keys)}, found {_found(value)}."
            )
        pairs: dict[str, Any] = {}
        for key, item in value:
            if key not in keys:
                raise self.fault(
                    path, f"unknown key {shown(key)}; accepted: {', '.join(keys)}.{nearest(key, keys)}"
                )
            if key in pairs:
                raise self.fault(path, f"the key {key!r} stands twice.")
            pairs[key] = item
        for key in keys:
            if key not in pairs:
                raise self.fault(path, f"the key {key!r} is missing.")
        return pairs

    def list(self, path: str, value: Any) -> Sequence[Any]:
        if not isinstance(value, list):
            raise self.fault(path, f"expected a list, found {_found(value)}.")
        return value

    def name(self, path: str, value: Any) -> str:
        if not isinstance(value, str) or not value:
            raise self.fault(path, f"expected non-empty text, found {_found(value)}.")
        if any("\ud800" <= character <= "\udfff" for character in value):
            raise self.fault(path, "holds half of a surrogate pair, which is no character.")
        return value

    def names(self, path: str, value: Any) -> tuple[str, ...]:
        return tuple(self.name(f"{path}[{k}]", item) for k, item in enumerate(self.list(path, value)))

    def states(self, variables: Sequence[Mapping[str, Any]]) -> dict[str, tuple[str, ...]]:
        states: dict[str, tuple[str, ...]] = {}
        for k, variable in enumerate(variables):
            name = self.name(f"variables[{k}].name", variable["name"])
            if name in states:
                raise self.fault(f"variables[{k}].name", f"variable {shown(name)} stands twice.")
            states[name] = self.names(f"variables[{k}].states", variable["states"])
            fault = check_states(name, states[name])
            if fault:
                raise self.fault(f"variables[{k}].states", f"{fault}.")
        return states

    def table(
        self, path: str, variable: Mapping[str, Any], states: Mapping[str, tuple[str, ...]], taken: int
    ) -> tuple[Cpt, str | None]:
        name = variable["name"]
        parents = self.names(f"{path}.parents", variable["parents"])
        for k, parent in enumerate(parents):
            if parent not in states:
                message = f"unknown variable {shown(parent)}.{nearest(parent, states)}"
                raise self.fault(f"{path}.parents[{k}]", message)
            if parent == name or parent in parents[:k]:
                raise self.fault(
                    f"{path}.parents[{k}]", f"{shown(parent)} must be another, different variable."
                )
        parents_states = [states[parent] for parent in parents]
        shape = (*map(len, parents_states), len(states[name]))
        fault = size_fault(name, shape, taken)
        if fault:
            raise self.fault(f"{path}.parents", fault)
        rows = self.list(f"{path}.rows", variable["rows"])
        expected = prod(shape[:-1])
        if len(rows) != expected:
            raise self.fault(f"{path}.rows", f"expected {expected} rows, found {len(rows)}.")

        def label(row: int) -> str:
            return row_label(name, next(islice(product(*parents_states), row, None)))

        p = np.empty((expected, shape[-1]), dtype=np.float64)
        for i, row in enumerate(rows):
            numbers = self.list(f"{path}.rows[{i}]", row)
            if len(numbers) != shape[-1]:
                raise self.fault(
                    f"{path}.rows[{i}]",
                    f"expected {shape[-1]} probabilities for {label(i)}, found {len(numbers)}.",
                )
            for j, number in enumerate(numbers):
                if (
                    not isinstance(number, (int, float))
                    or isinstance(number, bool)
                    or not is_probability(number)
                ):
                    raise self.fault(
                        f"{path}.rows[{i}][{j}]", f"expected a probability, found {_found(number)}."
                    )
            p[i] = numbers
        p, note = normalised(
            name,
            parents_states,
            p.reshape(shape),
            lambda i, message: self.fault(f"{path}.rows[{i}]", message),
        )
        return Cpt(name, parents, p), note


def network_json_text(network: Network) -> str:
    """Return the text of a JSON file, one variable a line; reading it gives the same network to the bit.

    Examples
    --------
    >>> from generators.graph import Graph
    >>> rain = Cpt("rain", (), np.array([0.8, 0.2]))
    >>> network = Network(Graph.from_edges(["rain"]), (("no", "yes"),), {"rain": rain})
    >>> print(network_json_text(network), end="")
    {"format": "arcassay network", "version": 1, "variables": [
      {"name": "rain", "states": ["no", "yes"], "parents": [], "rows": [[0.8, 0.2]]}
    ]}
    """
    variables = [
        {
            "name": name,
            "states": own,
            "parents": network.cpts[name].parents,
            "rows": network.cpts[name].rows().tolist(),
        }
        for name, own in zip(network.names, network.states, strict=True)
    ]
    lines = ",\n".join(f"  {json.dumps(variable, ensure_ascii=False)}" for variable in variables)
    return f'{{"format": "{FORMAT}", "version": {VERSION}, "variables": [\n{lines}\n]}}\n'
