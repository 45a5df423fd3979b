"""The registry that every topology enters.

A topology is a function ``topology(variables, *, rng, **settings)`` that returns the arcs of a DAG over
that many unnamed variables: a bool array, shape (p, p), [i, j] for i -> j. No position may be special:
the variables' order must say nothing about the graph.
"""

from __future__ import annotations

from generators.settings import Registry

TOPOLOGIES = Registry("topology", reserved=frozenset({"rng", "variables"}))
