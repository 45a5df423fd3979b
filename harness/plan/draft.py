"""A first plan for somebody who knows little more than how many variables there are."""

from __future__ import annotations

from generators.errors import InputError
from harness.plan.expansion import REPLICATES, VARIABLES, default_mean_parents
from harness.plan.schema import DEFAULT_ROWS

_TEXT = """\
# A study on synthetic networks, to be run before real data is touched.
# In [networks] a list is a factor: all combinations of the listed values are run.

title = "Structure learning with {variables} variables"
seed = 1                        # the same plan with the same seed gives the same answers

[networks]                      # the random truths: make them as much like your own network as you can
variables = {variables:<20}# of each network; a list such as [12, 24] tries both
topology = "random-order"       # arcs drawn along a random order of the variables
mean_parents = {mean_parents:<17}# arcs per variable: {arcs:g} arcs on average, before the next key takes some
max_parents = 3                 # no variable keeps more parents than this
states = "2-3"                  # of each variable: a range to draw from, or one number
cpts = "dirichlet"              # each row of a probability table is a draw from a Dirichlet distribution
concentration = 1.0             # below 1 rows are nearly certain, above 1 nearly even
replicates = {replicates:<19}# networks per combination: fewer are quicker and leave wider intervals

[data]
rows = {rows}    # how many rows learners see
datasets = 1                    # per network
# knowledge = {{arcs = 0.2, stages = true}}    # told to learners that take it: true arcs, stages in time

# One [[learner]] each. Keys other than method, label and limits are the method's settings;
# instead of alpha = 0.01, vary = {{alpha = [0.01, 0.05]}} would make two learners.
[[learner]]
method = "no-arcs"              # what doing nothing scores

[[learner]]
method = "chance"               # random arcs, as many as the networks have

[[learner]]
method = "chow-liu"             # the best tree

[[learner]]
method = "pc"                   # tests of conditional independence
label = "PC, 1 %"               # its name in tables and figures
alpha = 0.01                    # the level of its tests

[[learner]]
method = "hill-climbing"        # greedy search for the best score
score = "bic"

# [[learner]]
# source = "my_learner.py:learn"    # your own: a function in a file beside this plan

[limits]                        # of one run; a [[learner]] may have its own
seconds = 60                    # wall time
memory_mb = 2048                # resident memory

[requirement]                   # what one run must achieve
bounds = ["skeleton_recall >= 0.7", "skeleton_precision >= 0.8"]
assurance = 0.8                 # the share of runs that must achieve it
confidence = 0.95               # of every interval in the answers
"""


def draft_plan(variables: int) -> str:
    """Return the text of a commented plan with the default networks, row counts and requirement.

    Parameters
    ----------
    variables : int
        The number of variables of the networks.

    Returns
    -------
    str
        TOML, which `harness.plan.schema.parse_plan` accepts as it is.

    Raises
    ------
    InputError
        If there are fewer than 2 variables, or more than are accepted.

    Examples
    --------
    >>> draft_plan(12).splitlines()[3]
    'title = "Structure learning with 12 variables"'
    """
    try:
        variables = VARIABLES.parse(variables)
    except ValueError as error:
        raise InputError(f"variables: {error}") from None
    mean_parents = default_mean_parents(variables)
    return _TEXT.format(
        variables=variables,
        mean_parents=mean_parents,
        arcs=variables * mean_parents,
        replicates=REPLICATES.default,
        rows=list(DEFAULT_ROWS),
    )
