"""A walk over the tokens of a text that always knows its line and column."""

from __future__ import annotations

import re
from typing import NamedTuple

from generators.errors import InputError
from generators.files.text import shown

END = "end"
SYMBOL = "symbol"
WORD = "word"
QUOTED = "quoted"

# White space and comments; the quantifier is possessive, so no text makes it try again and again.
_BLANK = r"(?:\s+|//[^\n]*|/\*(?s:.*?)\*/)*+"
_SKIP = re.compile(_BLANK)


def token_pattern(**kinds: str) -> re.Pattern[str]:
    """Return the pattern for a `Scanner`: one regular expression per kind of token.

    White space and comments (``// ...`` and ``/* ... */``) may stand before each token.

    Parameters
    ----------
    **kinds : str
        `WORD`, `QUOTED` (with its quotes) and `SYMBOL`.
    """
    return re.compile(f"{_BLANK}(?:{'|'.join(f'(?P<{kind}>{one})' for kind, one in kinds.items())})")


class Token(NamedTuple):
    """One token: its kind, its text (quotes taken off) and where it starts in the whole text."""

    kind: str
    text: str
    offset: int

    def __str__(self) -> str:
        return "the end of the file" if self.kind == END else shown(self.text)


class Scanner:
    r"""The tokens of a text, one at a time, with one token of foresight.

    Parameters
    ----------
    text : str
    where : str
        The file's name, for messages.
    tokens : re.Pattern
        From `token_pattern`: white space and comments, then one token.

    Examples
    --------
    >>> scanner = Scanner("a {\n}", "x.bif", token_pattern(word=r"\w+", symbol="[{}]"))
    >>> scanner.advance().text, scanner.take("}"), scanner.take("{")
    ('a', False, True)
    >>> str(scanner.expected("a name"))
    "x.bif:2:1: expected a name, found '}'."
    """

    def __init__(self, text: str, where: str, tokens: re.Pattern[str]) -> None:
        self.text = text
        self.where = where
        self._tokens = tokens
        self.token = self._scan(0)

    def _scan(self, position: int) -> Token:
        found = self._tokens.match(self.text, position)
        if found:
            self._behind = found.end()
            kind = str(found.lastgroup)
            return Token(kind, found[kind][1:-1] if kind == QUOTED else found[kind], found.start(kind))
        blank = _SKIP.match(self.text, position)
        start = blank.end() if blank else position
        if start < len(self.text):
            raise self.fault(_stray(self.text[start : start + 2]), start)
        self._behind = start
        return Token(END, "", start)

    def advance(self) -> Token:
        """Return the token here and move to the next."""
        token = self.token
        self.token = self._scan(self._behind)
        return token

    def resume(self, offset: int) -> None:
        """Move to the first token at or behind an offset."""
        self.token = self._scan(offset)

    def at(self, text: str) -> bool:
        """Say whether this symbol or unquoted word stands here."""
        return self.token.text == text and self.token.kind in (SYMBOL, WORD)

    def take(self, text: str) -> bool:
        """Move on if this symbol or unquoted word stands here, and say whether it did."""
        if self.at(text):
            self.advance()
            return True
        return False

    def require(self, text: str) -> None:
        """Move on over this symbol or unquoted word, or refuse what stands here instead."""
        if not self.take(text):
            raise self.expected(repr(text))

    def expected(self, what: str) -> InputError:
        """Return the fault that something else stands here."""
        return self.fault(f"expected {what}, found {self.token}.", self.token.offset)

    def fault(self, message: str, offset: int) -> InputError:
        """Return an error that starts with file, line and column of an offset."""
        line = self.text.count("\n", 0, offset) + 1
        column = offset - self.text.rfind("\n", 0, offset)
        return InputError(f"{self.where}:{line}:{column}: {message}")


def _stray(start: str) -> str:
    if start == "/*":
        return "the comment that starts here has no end."
    if start[0] == '"':
        return "the quoted name that starts here has no end."
    return f"found {start[0]!r}, which stands for nothing here."
