"""The registry that every family of CPTs enters.

A family is a function ``family(graph, cardinalities, *, rng, **settings)`` that returns a `Cpt` for
every variable of a DAG, by name. `cardinalities` is an int64 array, shape (p,), in the graph's order.
The parents of each table stand in the graph's order.
"""

from __future__ import annotations

from generators.settings import Registry

CPT_FAMILIES = Registry("CPT family")
