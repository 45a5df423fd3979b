"""The methods that come with the package, by name; each is imported only when it is asked for."""

from __future__ import annotations

import importlib
from collections.abc import Mapping
from types import MappingProxyType

from generators.errors import InputError
from generators.settings import nearest
from harness.learners.specification import Specification, specification_of

BUILT_IN: Mapping[str, str] = MappingProxyType(
    {
        "no-arcs": "harness.learners.baselines:no_arcs",
        "chance": "harness.learners.baselines:chance",
        "pairwise": "harness.learners.marginal:pairwise",
        "chow-liu": "harness.learners.marginal:chow_liu",
        "pc": "harness.learners.constraint:pc",
        "grow-shrink": "harness.learners.blankets:grow_shrink",
        "iamb": "harness.learners.blankets:iamb",
        "inter-iamb": "harness.learners.blankets:inter_iamb",
        "hill-climbing": "harness.learners.greedy_dag:hill_climbing",
        "mmhc": "harness.learners.max_min:mmhc",
    }
)


def built_in(name: str) -> Specification:
    """Return the specification of a built-in method.

    Parameters
    ----------
    name : str
        One of the keys of `BUILT_IN`.

    Raises
    ------
    InputError
        If there is no built-in method of that name.

    Examples
    --------
    >>> built_in("pcc")  # doctest: +ELLIPSIS
    Traceback (most recent call last):
        ...
    generators.errors.InputError: unknown method 'pcc'; accepted: ... Did you mean 'pc'?
    """
    if name not in BUILT_IN:
        accepted = ", ".join(sorted(BUILT_IN))
        raise InputError(f"unknown method {name!r}; accepted: {accepted}.{nearest(name, BUILT_IN)}")
    module, _, function = BUILT_IN[name].partition(":")
    return specification_of(getattr(importlib.import_module(module), function))
