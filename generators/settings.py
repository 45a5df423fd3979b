"""Settings read from a function's signature, and registries of functions that have them.

Topologies, CPT families, distortions and learners are plain functions. Their settings are their
keyword-only arguments: name, type, default and bounds come from the signature, so what a plan may say,
what `arcassay list` prints and what the code takes cannot drift apart.
"""

from __future__ import annotations

import difflib
import inspect
import math
import numbers
import typing
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

from generators.errors import InputError

REQUIRED = inspect.Parameter.empty


@dataclass(frozen=True, slots=True)
class Between:
    """Bounds of a number, for use in ``Annotated[float, Between(0, 1)]``.

    Parameters
    ----------
    low, high : float
        The least and the greatest value.
    inside : bool
        Whether the bounds themselves are left out.
    """

    low: float = -math.inf
    high: float = math.inf
    inside: bool = False

    def __contains__(self, value: float) -> bool:
        return self.low < value < self.high if self.inside else self.low <= value <= self.high

    def __str__(self) -> str:
        if self.high == math.inf:
            return f"{'above' if self.inside else 'at least'} {self.low:g}"
        return f"{'strictly ' if self.inside else ''}between {self.low:g} and {self.high:g}"


@dataclass(frozen=True, slots=True)
class Setting:
    """One setting of a registered function.

    Parameters
    ----------
    name : str
    kind : type
        bool, int, float or str.
    default : Any
        `REQUIRED` where the function has none.
    choices : tuple of str
        The accepted texts, if they are listed.
    bounds : Between
        Of a number.
    optional : bool
        Whether None (absent in a plan) is a value of its own.
    """

    name: str
    kind: type
    default: Any = REQUIRED
    choices: tuple[str, ...] = ()
    bounds: Between = field(default_factory=Between)
    optional: bool = False

    @property
    def accepted(self) -> str:
        """What is accepted, in words."""
        if self.choices:
            return f"one of {', '.join(self.choices)}"
        if self.kind is bool:
            return "true or false"
        if self.kind is str:
            return "text"
        word = "a whole number" if self.kind is int else "a number"
        return word if self.bounds == Between() else f"{word} {self.bounds}"

    def parse(self, value: Any) -> Any:
        """Return `value` in the declared type.

        Raises
        ------
        ValueError
            "must be ..., got ...".

        Examples
        --------
        >>> Setting("alpha", float, bounds=Between(0, 1)).parse(-3)
        Traceback (most recent call last):
            ...
        ValueError: must be a number between 0 and 1, got -3
        """
        if value is None and self.optional:
            return None
        fault = ValueError(f"must be {self.accepted}, got {value!r}")
        if self.kind in (int, float):
            whole = isinstance(value, numbers.Integral) and not isinstance(value, bool)
            if not whole and not (
                self.kind is float and isinstance(value, numbers.Real) and math.isfinite(value)
            ):
                raise fault
            try:
                number = self.kind(value)
            except OverflowError:
                raise fault from None
            if number not in self.bounds:
                raise fault
            return number
        if not isinstance(value, self.kind) or (self.choices and value not in self.choices):
            raise fault
        return value


def settings_of(function: Callable[..., Any], reserved: frozenset[str] = frozenset()) -> dict[str, Setting]:
    """Read the settings of a function from its keyword-only arguments.

    Parameters
    ----------
    function : callable
        Its keyword-only arguments may be annotated bool, int, float, str, ``Literal[...]`` of texts,
        ``Annotated[number, Between(...)]`` or any of these ``| None``. Without an annotation the type
        of the default counts.
    reserved : frozenset of str
        Arguments that are not settings (`rng` and the like).

    Raises
    ------
    TypeError
        If an argument has neither an annotation of these kinds nor a default of these types.

    Examples
    --------
    >>> def draw(*, alpha: typing.Annotated[float, Between(0, 1)] = 0.05, rng): ...
    >>> settings_of(draw, frozenset({"rng"}))["alpha"].accepted
    'a number between 0 and 1'
    """
    try:
        hints = typing.get_type_hints(function, include_extras=True)
    except Exception:  # a stranger's annotation may name what is not there; its defaults still speak
        hints = {}
    settings = {}
    for name, parameter in inspect.signature(function).parameters.items():
        if parameter.kind is parameter.KEYWORD_ONLY and name not in reserved:
            settings[name] = _setting(name, hints.get(name), parameter.default)
    return settings


def _setting(name: str, hint: Any, default: Any) -> Setting:
    bounds, optional = Between(), False
    choices: tuple[str, ...] = ()
    if hint is None and default is not REQUIRED:
        hint = type(default)
    while True:
        origin, parts = typing.get_origin(hint), typing.get_args(hint)
        if origin is typing.Annotated:
            bounds = next((part for part in parts[1:] if isinstance(part, Between)), bounds)
            hint = parts[0]
        elif type(None) in parts and len(parts) == 2:
            optional = True
            hint = next(part for part in parts if part is not type(None))
        elif origin is Literal:
            choices, hint = tuple(str(part) for part in parts), str
        else:
            break
    if hint not in (bool, int, float, str):
        raise TypeError(f"setting {name!r} must be annotated bool, int, float, str or Literal texts")
    return Setting(name, hint, default, choices, bounds, optional)


def nearest(word: str, known: typing.Iterable[str]) -> str:
    """Return " Did you mean '...'?" for the closest known name, or nothing."""
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)
    return f" Did you mean {close[0]!r}?" if close else ""


@dataclass(frozen=True, slots=True)
class Registered:
    """A function under the name by which plans and the command line call it.

    `revision` goes up whenever the same settings and stream give another result; it is part of the
    keys of what the function made.
    """

    name: str
    function: Callable[..., Any]
    settings: Mapping[str, Setting]
    reference: str
    revision: int = 1

    @property
    def summary(self) -> str:
        """The first line of the function's docstring."""
        return (inspect.getdoc(self.function) or "").partition("\n")[0]


class Registry(Mapping[str, Registered]):
    """Functions of one kind by name.

    Parameters
    ----------
    kind : str
        What they are, for messages ("topology").
    reserved : frozenset of str
        Keyword-only arguments that are not settings.
    """

    def __init__(self, kind: str, reserved: frozenset[str] = frozenset({"rng"})) -> None:
        self.kind = kind
        self._reserved = reserved
        self._entries: dict[str, Registered] = {}

    def register(
        self, name: str, *, reference: str, revision: int = 1
    ) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
        """Return a decorator that enters a function and gives it back unchanged."""

        def enter(function: Callable[..., Any]) -> Callable[..., Any]:
            settings = settings_of(function, self._reserved)
            self._entries[name] = Registered(name, function, settings, reference, revision)
            return function

        return enter

    def __getitem__(self, name: str) -> Registered:
        return self._entries[name]

    def __iter__(self) -> Iterator[str]:
        return iter(self._entries)

    def __len__(self) -> int:
        return len(self._entries)

    def unknown(self, name: object) -> str:
        """Say that `name` is not registered, and which names are."""
        hint = nearest(str(name), self)
        return f"unknown {self.kind} {name!r}; accepted: {', '.join(sorted(self))}.{hint}"

    def parse(self, name: str, given: Mapping[str, Any]) -> dict[str, Any]:
        """Return the given settings of a registered function in their declared types.

        Parameters
        ----------
        name : str
            What is registered.
        given : mapping of str to value
            Settings that are not given keep their defaults and stay out of the result.

        Raises
        ------
        InputError
            If `name` is not registered; or with one line per setting that is unknown, has a value
            that is not accepted, or has no default and is not given.

        Examples
        --------
        >>> shapes = Registry("shape")
        >>> @shapes.register("disc", reference="none")
        ... def disc(*, radius: typing.Annotated[float, Between(0)], rng): ...
        >>> shapes.parse("disc", {"radius": 2})
        {'radius': 2.0}
        >>> shapes.parse("disc", {"radius": 2, "hue": 1})
        Traceback (most recent call last):
            ...
        generators.errors.InputError: shape 'disc': unknown setting 'hue'; accepted: radius.
        """
        if name not in self:
            raise InputError(self.unknown(name))
        declared = self[name].settings
        place = f"{self.kind} {name!r}"
        values, faults = {}, []
        for key, value in given.items():
            if key not in declared:
                accepted = ", ".join(sorted(declared)) or "none"
                hint = nearest(key, declared)
                faults.append(f"{place}: unknown setting {key!r}; accepted: {accepted}.{hint}")
                continue
            try:
                values[key] = declared[key].parse(value)
            except ValueError as error:
                faults.append(f"{place}: {key}: {error}")
        faults += [
            f"{place}: {key}: {setting.accepted} is required"
            for key, setting in declared.items()
            if setting.default is REQUIRED and key not in given
        ]
        if faults:
            raise InputError(*faults)
        return values
