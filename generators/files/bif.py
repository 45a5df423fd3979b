"""Networks in the BIF interchange format (Cozman 1996): a strict reader and a writer.

    network NAME { property ...; }
    variable NAME { type discrete [ 2 ] { no, yes }; property ...; }
    probability ( child | parents ) { table ...; (states) p, p; default p, p; }

`table` lists all probabilities with the child's state slowest and the last parent's fastest. The bar
between child and parents is only a separator: older files have a comma or white space there.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import product
from math import prod

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.files.assembly import build_network, is_probability, normalised, row_label, size_fault
from generators.files.scanner import END, QUOTED, WORD, Scanner, Token, token_pattern
from generators.files.text import NUMBER, shown
from generators.network import Cpt, Network, check_states
from generators.settings import nearest

# A word ends before a comment, so a name with // or /* in it must be quoted.
_WORD = r'(?:[^\s{}()\[\]|,;"/\x00-\x1f\x7f]|/(?![/*]))++'
_TOKENS = token_pattern(word=_WORD, quoted=r'"[^"\n\r\x00-\x08\x0b-\x1f\x7f]*"', symbol=r"[{}()\[\]|,;]")
_PLAIN = re.compile(_WORD)
_UNWRITABLE = re.compile(r'["\n\r\x00-\x08\x0b-\x1f\x7f]')
_KEYWORDS = frozenset(
    {"network", "variable", "probability", "property", "type", "discrete", "default", "table"}
)
# The text of a property is free up to its semicolon; one inside double quotes does not end it.
_PROPERTY = re.compile(r'(?>"[^"\n]*"|[^;])*+;')
# Numbers with commas between them and nothing else: nearly all lists, read in one go.
_USUAL_NUMBERS = re.compile(r"([0-9.eE+\-,\s]*+);")
_COUNT = re.compile(r"[0-9]{1,9}")


@dataclass(frozen=True, slots=True)
class _Numbers:
    values: list[float]
    offset: int  # of the first number


@dataclass(slots=True)
class _Block:
    child: Token
    parents: list[Token]
    table: _Numbers | None = None
    default: _Numbers | None = None
    rows: list[tuple[list[Token], _Numbers, int]] = field(default_factory=list)  # states, numbers, offset


def parse_bif(text: str, where: str) -> tuple[Network, tuple[str, ...]]:
    """Read a network from the text of a BIF file.

    Parameters
    ----------
    text : str
    where : str
        The file's name, for messages.

    Returns
    -------
    network : Network
        Variables in the order of their declarations.
    notes : tuple of str
        One per table that had rows to renormalise.

    Raises
    ------
    InputError
        ``FILE:LINE:COLUMN: what was expected, what was found``.

    References
    ----------
    Cozman (1996), The Interchange Format for Bayesian Networks.

    Examples
    --------
    >>> network, notes = parse_bif('''network tiny { }
    ... variable rain { type discrete [ 2 ] { no, yes }; }
    ... probability ( rain ) { table 0.8, 0.2; }''', "tiny.bif")
    >>> network.cpts["rain"].p.tolist(), notes
    ([0.8, 0.2], ())
    """
    scanner = _BifScanner(text, where)
    scanner.network_header()
    variables: dict[str, Token] = {}
    states: dict[str, tuple[str, ...]] = {}
    blocks: dict[str, _Block] = {}
    while scanner.token.kind != END:
        if scanner.take("variable"):
            token, own = scanner.variable()
            if token.text in states:
                raise scanner.fault(f"variable {shown(token.text)} is declared a second time.", token.offset)
            variables[token.text], states[token.text] = token, own
        elif scanner.take("probability"):
            block = scanner.block()
            if block.child.text in blocks:
                raise scanner.fault(
                    f"a second probability block for {shown(block.child.text)}.", block.child.offset
                )
            blocks[block.child.text] = block
        else:
            raise scanner.expected("'variable' or 'probability'")
    if not variables:
        raise scanner.expected("at least one variable")
    for name, token in variables.items():
        if name not in blocks:
            raise scanner.fault(f"variable {shown(name)} has no probability block.", token.offset)
    return _assemble(scanner, states, blocks)


def _assemble(
    scanner: Scanner, states: Mapping[str, tuple[str, ...]], blocks: Mapping[str, _Block]
) -> tuple[Network, tuple[str, ...]]:
    cpts, notes, taken = [], [], 0
    for block in blocks.values():
        _check_names(scanner, block, states)
        parents = tuple(parent.text for parent in block.parents)
        parents_states = [states[parent] for parent in parents]
        shape = (*map(len, parents_states), len(states[block.child.text]))
        fault = size_fault(block.child.text, shape, taken)
        if fault:
            raise scanner.fault(fault, block.child.offset)
        taken += prod(shape)
        rows, offsets = _rows(scanner, block, states)

        def refuse(row: int, message: str, offsets: NDArray[np.int64] = offsets) -> InputError:
            return scanner.fault(message, int(offsets[row]))

        p, note = normalised(block.child.text, parents_states, rows.reshape(shape), refuse)
        cpts.append(Cpt(block.child.text, parents, p))
        if note:
            notes.append(str(scanner.fault(note, block.child.offset)))
    children = [block.child for block in blocks.values()]
    network = build_network(states, cpts, lambda k, message: scanner.fault(message, children[k].offset))
    return network, tuple(notes)


def _check_names(scanner: Scanner, block: _Block, states: Mapping[str, tuple[str, ...]]) -> None:
    seen: set[str] = set()
    for token in (block.child, *block.parents):
        if token.text not in states:
            hint = nearest(token.text, states)
            raise scanner.fault(f"unknown variable {shown(token.text)}.{hint}", token.offset)
        if token.text in seen:
            raise scanner.fault(f"variable {shown(token.text)} stands twice in one block.", token.offset)
        seen.add(token.text)


def _rows(
    scanner: Scanner, block: _Block, states: Mapping[str, tuple[str, ...]]
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Return one row per joint parent state, first parent slowest, and the offset of each row's numbers."""
    child = block.child.text
    parents_states = [states[parent.text] for parent in block.parents]
    q, r = prod(map(len, parents_states)), len(states[child])

    def check_count(numbers: _Numbers, expected: int, label: str) -> None:
        found = len(numbers.values)
        if found != expected:
            noun = "probability" if expected == 1 else "probabilities"
            raise scanner.fault(f"expected {expected} {noun} for {label}, found {found}.", numbers.offset)

    if block.table is not None:
        check_count(block.table, q * r, f"the table of {child!r}")
        whole = np.array(block.table.values, dtype=np.float64).reshape(r, q).T
        return whole, np.full(q, block.table.offset, dtype=np.int64)
    rows = np.empty((q, r), dtype=np.float64)
    offsets = np.full(q, -1, dtype=np.int64)
    positions = [{state: i for i, state in enumerate(own)} for own in parents_states]
    for tokens, numbers, offset in block.rows:
        row = _row_position(scanner, block, positions, tokens, offset)
        label = row_label(child, [token.text for token in tokens])
        check_count(numbers, r, label)
        if offsets[row] >= 0:
            raise scanner.fault(f"a second row for {label}.", offset)
        rows[row] = numbers.values
        offsets[row] = numbers.offset
    lacking = offsets < 0
    if block.default is not None:
        check_count(block.default, r, "'default'")
        rows[lacking] = block.default.values
        offsets[lacking] = block.default.offset
    elif lacking.any():
        index = np.unravel_index(int(lacking.argmax()), [len(own) for own in parents_states] or [1])
        label = row_label(child, [own[int(i)] for own, i in zip(parents_states, index)])
        raise scanner.fault(
            f"the block of {child!r} has no row for {label} and no default.", block.child.offset
        )
    return rows, offsets


def _row_position(
    scanner: Scanner,
    block: _Block,
    positions: Sequence[Mapping[str, int]],
    tokens: Sequence[Token],
    offset: int,
) -> int:
    if len(tokens) != len(positions):
        raise scanner.fault(f"expected {len(positions)} states of the parents, found {len(tokens)}.", offset)
    row = 0
    for token, parent, own in zip(tokens, block.parents, positions, strict=True):
        if token.text not in own:
            hint = nearest(token.text, own)
            raise scanner.fault(f"{shown(token.text)} is not a state of {parent.text!r}.{hint}", token.offset)
        row = row * len(own) + own[token.text]
    return row


class _BifScanner(Scanner):
    """The grammar: one method per piece of a file."""

    def __init__(self, text: str, where: str) -> None:
        super().__init__(text, where, _TOKENS)

    def network_header(self) -> None:
        if not self.at("network"):
            raise self.expected("'network' (a BIF file starts with 'network NAME {')")
        self.advance()
        self.name("the network's name")
        self.require("{")
        while not self.take("}"):
            if not self.take_property():
                raise self.expected("'property' or '}'")

    def variable(self) -> tuple[Token, tuple[str, ...]]:
        variable = self.name("a variable's name")
        own: tuple[str, ...] | None = None
        self.require("{")
        while not self.take("}"):
            if self.take_property():
                continue
            if own is not None or not self.take("type"):
                raise self.expected("'type', 'property' or '}'" if own is None else "'property' or '}'")
            own = self.states()
        if own is None:
            raise self.fault(f"variable {shown(variable.text)} has no 'type discrete'.", variable.offset)
        fault = check_states(variable.text, own)
        if fault:
            raise self.fault(f"{fault}.", variable.offset)
        return variable, own

    def states(self) -> tuple[str, ...]:
        self.require("discrete")
        self.require("[")
        count = self.token
        if count.kind != WORD or not _COUNT.fullmatch(count.text):
            raise self.expected("the number of states")
        self.advance()
        self.require("]")
        self.require("{")
        own = tuple(token.text for token in self.names("}", "a state"))
        self.require(";")
        if int(count.text) != len(own):
            raise self.fault(f"expected {int(count.text)} states, found {len(own)}.", count.offset)
        return own

    def block(self) -> _Block:
        self.require("(")
        child = self.name("a variable's name")
        if not self.take("|"):
            self.take(",")
        block = _Block(child, self.names(")", "a parent's name"))
        self.require("{")
        while not self.take("}"):
            if not self.take_property():
                self.entry(block)
        return block

    def entry(self, block: _Block) -> None:
        here = self.token
        if self.at("table"):
            if block.table is not None or block.default is not None or block.rows:
                raise self.fault("'table' gives all rows and must stand alone.", here.offset)
            self.advance()
            block.table = self.numbers()
        elif block.table is not None:
            raise self.expected("'property' or '}' behind 'table'")
        elif self.at("default"):
            if block.default is not None:
                raise self.fault("a second 'default'.", here.offset)
            self.advance()
            block.default = self.numbers()
        elif self.take("("):
            states = self.names(")", "a state")
            block.rows.append((states, self.numbers(), here.offset))
        else:
            raise self.expected("'table', 'default', 'property', '(' or '}'")

    def name(self, what: str) -> Token:
        token = self.token
        if token.kind not in (WORD, QUOTED) or not token.text:
            raise self.fault(f"expected {what}, found {token}.", token.offset)
        return self.advance()

    def names(self, closing: str, what: str) -> list[Token]:
        """Read names up to the closing symbol; the comma between two of them may be left out."""
        names: list[Token] = []
        while not self.take(closing):
            comma = bool(names) and self.take(",")
            names.append(self.name(what if comma else f"{what} or {closing!r}"))
        return names

    def numbers(self) -> _Numbers:
        offset = self.token.offset
        usual = _USUAL_NUMBERS.match(self.text, offset)
        if usual:
            try:
                values = [float(number) for number in usual[1].split(",")]
            except ValueError:  # white space only between two numbers, or a fault to be placed
                values = []
            if values and is_probability(min(values)) and is_probability(max(values)):
                self.resume(usual.end())
                return _Numbers(values, offset)
        values = []
        while not self.take(";"):
            comma = bool(values) and self.take(",")
            token = self.token
            value = float(token.text) if token.kind == WORD and NUMBER.fullmatch(token.text) else -1.0
            if not is_probability(value):
                raise self.expected("a probability" if comma or not values else "a probability or ';'")
            values.append(value)
            self.advance()
        return _Numbers(values, offset)

    def take_property(self) -> bool:
        if not self.at("property"):
            return False
        found = _PROPERTY.match(self.text, self.token.offset)
        if found is None:
            raise self.fault("the property that starts here has no ';'.", self.token.offset)
        self.resume(found.end())
        return True


def bif_text(network: Network) -> str:
    """Return the text of a BIF file; reading it gives the same network to the bit.

    Raises
    ------
    InputError
        If a name holds a double quote, a line end or another control character.

    Examples
    --------
    >>> from generators.graph import Graph
    >>> rain = Cpt("rain", (), np.array([0.8, 0.2]))
    >>> print(bif_text(Network(Graph.from_edges(["rain"]), (("no", "not yet"),), {"rain": rain})), end="")
    network unnamed {
    }
    variable rain {
      type discrete [ 2 ] { no, "not yet" };
    }
    probability ( rain ) {
      table 0.8, 0.2;
    }
    """
    states = {name: [_written(state) for state in own] for name, own in zip(network.names, network.states)}
    lines = ["network unnamed {", "}"]
    for name, own in states.items():
        lines += [
            f"variable {_written(name)} {{",
            f"  type discrete [ {len(own)} ] {{ {', '.join(own)} }};",
            "}",
        ]
    for name, cpt in network.cpts.items():
        parents = "".join(f"{', ' if k else ' | '}{_written(parent)}" for k, parent in enumerate(cpt.parents))
        lines.append(f"probability ( {_written(name)}{parents} ) {{")
        joint = product(*(states[parent] for parent in cpt.parents))
        for given, row in zip(joint, cpt.rows().tolist(), strict=True):
            head = f"({', '.join(given)})" if given else "table"
            lines.append(f"  {head} {', '.join(map(repr, row))};")
        lines.append("}")
    return "\n".join(lines) + "\n"


def _written(name: str) -> str:
    if _UNWRITABLE.search(name):
        raise InputError(
            f"BIF cannot hold the name {shown(name)}: no double quote, line end or control character."
        )
    return name if _PLAIN.fullmatch(name) and name not in _KEYWORDS else f'"{name}"'
