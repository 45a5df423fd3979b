"""Plans: what they mean, and everything that can be wrong with one, said at once."""

from __future__ import annotations

import math
import pickle
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from generators.catalogue import published_network
from generators.errors import InputError
from generators.files import write_network
from harness.learners.builtin import BUILT_IN
from harness.plan.draft import draft_plan
from harness.plan.expansion import mean_parents, settings_for
from harness.plan.schema import Plan, expected_runs, parse_plan, read_plan
from harness.records import Bound, Limits, Requirement

WHOLE = """
title = "Apiary winter-loss survey"
seed = 20261201
[networks]
variables = [12, 24]
topology = "random-order"
mean_parents = 1.5
max_parents = 3
states = "2-3"
cpts = "dirichlet"
concentration = 1.0
replicates = 100
[data]
rows = [250, 500, 1000, 2000, 4000, 8000, 16000]
datasets = 1
[[learner]]
method = "pc"
label = "PC, 2 %"
alpha = 0.02
[[learner]]
method = "hill-climbing"
score = "bic"
[[learner]]
source = "my_learner.py:learn"
seconds = 5
[limits]
seconds = 60
memory_mb = 1024
[requirement]
bounds = ["skeleton_recall >= 0.7", "skeleton_precision >= 0.8"]
assurance = 0.8
confidence = 0.95
precision = 0.1
max_rows = 100000
max_runs = 20000
max_failed = 0.05
[gate]
margin = {class_shd = 1.0}
slower = 1.25
reference = "hill-climbing"
error = 0.01
"""

LEARNER = """\
from typing import Annotated, Literal
from generators.settings import Between

def learn(data, *, alpha: Annotated[float, Between(0, 1)] = 0.05, depth: int = 3, fast: bool = False,
          test: Literal["g2", "pearson"] = "g2"):
    "Return nothing."

def needy(data, *, depth: int):
    "Return nothing."
"""

BROKEN_BIF = """\
network two { }
variable a { type discrete [ 2 ] { no, yes }; }
probability ( a ) { table 0.5; }
"""
NO_ARCS = '[[learner]]\nmethod = "no-arcs"\n'
MINE = '[[learner]]\nsource = "my_learner.py:learn"\n'


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Give a folder with a learner's file."""
    (tmp_path / "my_learner.py").write_text(LEARNER)
    return tmp_path


def plan_of(
    *, top: str = "", networks: str = "variables = 6", data: str = "", learners: str = NO_ARCS, rest: str = ""
) -> str:
    """Give the text of a plan that is sound but for what is put in."""
    return f"{top}\n[networks]\n{networks}\n[data]\n{data}\n{learners}\n{rest}\n"


def factors(plan: Plan) -> list[dict[str, Any]]:
    return [dict(condition.factors) for condition in plan.conditions]


def parsed(folder: Path, **parts: str) -> Plan:
    return parse_plan(plan_of(**parts), folder / "plan.toml")


def faults(text: str, folder: Path) -> list[str]:
    """Give the faults of a plan without the file's name, which begins each."""
    with pytest.raises(InputError) as caught:
        parse_plan(text, folder / "plan.toml")
    lines = list(caught.value.faults)
    assert all(line.startswith("plan.toml:") and "\n" not in line for line in lines)
    return [line.removeprefix("plan.toml:").lstrip() for line in lines]


# What a plan means


def test_a_whole_plan_is_read(folder: Path) -> None:
    """Every section arrives in its declared form."""
    (folder / "survey.toml").write_text(WHOLE)

    plan = read_plan(folder / "survey.toml")

    assert (plan.title, plan.seed, plan.text) == ("Apiary winter-loss survey", 20261201, WHOLE)
    assert plan.path == folder / "survey.toml"
    assert factors(plan) == [
        {"variables": 12},
        {"variables": 24},
    ]
    assert dict(plan.conditions[0].networks) == {
        "variables": 12,
        "topology": "random-order",
        "states": "2-3",
        "cpts": "dirichlet",
        "mean_parents": 1.5,
        "max_parents": 3,
        "concentration": 1.0,
    }
    assert plan.rows == (250, 500, 1000, 2000, 4000, 8000, 16000)
    assert [learner.label for learner in plan.learners] == ["PC, 2 %", "hill-climbing", "my_learner.py:learn"]
    assert [dict(learner.settings) for learner in plan.learners] == [{"alpha": 0.02}, {}, {}]
    assert plan.limits == Limits(60.0, 1024, 1)
    assert [learner.limits.seconds for learner in plan.learners] == [60.0, 60.0, 5.0]
    assert plan.requirement == Requirement(
        (Bound("skeleton_recall", ">=", 0.7), Bound("skeleton_precision", ">=", 0.8)),
        0.8,
        0.95,
        0.1,
        100_000,
        20_000,
        0.05,
    )
    assert plan.gate == {
        "margin": {"class_shd": 1.0},
        "slower": 1.25,
        "reference": "hill-climbing",
        "error": 0.01,
    }
    assert expected_runs(plan) == 2 * 100 * 7 * 3


def test_the_least_plan_has_the_stated_defaults() -> None:
    """Everything but the variables and a learner may be left out."""
    plan = parse_plan(plan_of(networks="variables = 12"))

    assert dict(plan.conditions[0].networks) == {
        "variables": 12,
        "topology": "random-order",
        "states": "2-3",
        "cpts": "dirichlet",
        "mean_parents": 1.5,
        "max_parents": 3,
        "concentration": 1.0,
    }
    assert (plan.conditions[0].replicates, plan.conditions[0].datasets) == (100, 1)
    assert dict(plan.conditions[0].factors) == {}
    assert plan.rows == (250, 500, 1000, 2000, 4000, 8000, 16000)
    assert plan.requirement == Requirement(
        (Bound("skeleton_recall", ">=", 0.7), Bound("skeleton_precision", ">=", 0.8))
    )
    assert plan.limits == Limits()
    assert plan.gate is None
    assert plan.title == "plan"


@pytest.mark.parametrize(
    ("variables", "expected"), [(2, 0.25), (6, 1.25), (7, 1.5), (12, 1.5), (13, 1.2), (50, 1.2)]
)
def test_the_default_density_depends_on_the_variables(variables: int, expected: float) -> None:
    """It is 1.5 up to 12 variables and 1.2 above, and never joins more than half of all pairs."""
    plan = parse_plan(plan_of(networks=f"variables = {variables}"))

    assert plan.conditions[0].networks["mean_parents"] == expected


def test_lists_are_crossed_and_the_varied_keys_are_the_factors() -> None:
    """Every combination of levels is a condition; a list with one level is no factor."""
    plan = parse_plan(plan_of(networks='variables = [5, 6]\nstates = [2, "2-4"]\nmean_parents = [1.0]'))

    expected = [{"variables": variables, "states": states} for variables in (5, 6) for states in (2, "2-4")]
    assert factors(plan) == expected


def test_a_key_that_a_level_does_not_use_is_absent_there_and_equal_conditions_are_merged() -> None:
    """Topology "uniform" has no mean_parents: its two crossings with that factor are one condition."""
    networks = 'variables = 6\ntopology = ["random-order", "uniform"]\nmean_parents = [0.5, 1.0]'

    plan = parse_plan(plan_of(networks=networks))

    assert factors(plan) == [
        {"topology": "random-order", "mean_parents": 0.5},
        {"topology": "random-order", "mean_parents": 1.0},
        {"topology": "uniform"},
    ]
    assert "mean_parents" not in plan.conditions[2].networks


def test_levels_that_say_the_same_are_one() -> None:
    """A number, its text and a range of one number are the same states; 1 is the same density as 1.0."""
    plan = parse_plan(
        plan_of(networks='variables = [6, 6]\nstates = [2, "2", "2-2"]\nmean_parents = [1, 1.0]')
    )

    assert len(plan.conditions) == 1
    assert plan.conditions[0].networks["states"] == 2


def test_rows_are_sorted_and_may_be_one_number() -> None:
    """The order in the plan says nothing."""
    several = parse_plan(plan_of(data="rows = [1000, 50, 300]"))
    one = parse_plan(plan_of(data="rows = 40"))

    assert several.rows == (50, 300, 1000)
    assert one.rows == (40,)


def test_vary_makes_one_learner_per_value_with_labels_that_say_which(folder: Path) -> None:
    """Several keys are crossed, the last fastest; a value that is the default is named too."""
    own = '[[learner]]\nsource = "my_learner.py:learn"\n'
    learners = (
        f'{own}label = "Mine"\nvary = {{alpha = [0.01, 0.05], fast = [true, false]}}\n'
        f"{own}depth = 4\nvary = {{alpha = [0.1]}}"
    )

    plan = parsed(folder, learners=learners)

    assert [(learner.label, dict(learner.settings)) for learner in plan.learners] == [
        ("Mine, alpha 0.01, fast true", {"alpha": 0.01, "fast": True}),
        ("Mine, alpha 0.01, fast false", {"alpha": 0.01}),
        ("Mine, alpha 0.05, fast true", {"fast": True}),
        ("Mine, alpha 0.05, fast false", {}),
        ("my_learner.py:learn, depth 4, alpha 0.1", {"depth": 4, "alpha": 0.1}),
    ]


def test_a_label_left_out_names_the_settings_that_are_not_the_defaults(folder: Path) -> None:
    """Two learners of one method need no labels to be told apart."""
    own = '[[learner]]\nsource = "my_learner.py:learn"\n'

    plan = parsed(folder, learners=f"{own}alpha = 0.05\n{own}alpha = 0.01\ntest = 'pearson'\n")

    assert [learner.label for learner in plan.learners] == [
        "my_learner.py:learn",
        "my_learner.py:learn, alpha 0.01, test pearson",
    ]


def test_the_nearest_limit_holds(folder: Path) -> None:
    """A learner's own limit goes before the plan's, the plan's before what the learner declares."""
    (folder / "wide.py").write_text(
        "from harness.learners.specification import learner\n\n"
        "@learner('wide', threads=4)\ndef learn(data):\n    'Return nothing.'\n"
    )
    text = '[[learner]]\nsource = "wide.py:learn"\n'

    declared = parsed(folder, learners=text)
    by_plan = parsed(folder, learners=f"{text}[limits]\nthreads = 2\nseconds = 7")
    own = parsed(folder, learners=f"{text}threads = 1\nmemory_mb = 700\n[limits]\nthreads = 2\nseconds = 7")

    assert declared.learners[0].limits == Limits(60.0, 2048, 4)
    assert by_plan.learners[0].limits == Limits(7.0, 2048, 2)
    assert own.learners[0].limits == Limits(7.0, 700, 1)


def test_given_networks_come_from_files_beside_the_plan(folder: Path) -> None:
    """The path is absolute for whoever reads it, the factor shows the file's stem; 100 datasets of each."""
    write_network(published_network("chest-clinic"), folder / "one.bif")
    write_network(published_network("sprinkler"), folder / "two.json")

    plan = parsed(folder, networks='file = ["one.bif", "two.json", "./one.bif"]')

    assert [dict(condition.networks) for condition in plan.conditions] == [
        {"file": str(folder / "one.bif")},
        {"file": str(folder / "two.json")},
    ]
    assert factors(plan) == [{"file": "one"}, {"file": "two"}]
    assert [(condition.replicates, condition.datasets) for condition in plan.conditions] == [
        (1, 100),
        (1, 100),
    ]


@pytest.mark.parametrize(
    ("paths", "expected"),
    [
        (("a/net.bif", "b/net.bif"), ["a/net", "b/net"]),
        (("a/net.bif", "a/net.json"), ["net.bif", "net.json"]),
    ],
)
def test_files_of_one_stem_are_told_apart(folder: Path, paths: tuple[str, ...], expected: list[str]) -> None:
    """As much of the path is shown as makes the levels differ."""
    for path, name in zip(paths, ("sprinkler", "burglary"), strict=True):
        (folder / path).parent.mkdir(exist_ok=True)
        write_network(published_network(name), folder / path)

    plan = parsed(folder, networks=f"file = {list(paths)}")

    assert [condition.factors["file"] for condition in plan.conditions] == expected


def test_published_networks_are_named(folder: Path) -> None:
    """A network of the catalogue needs no file; how many datasets it gets is the plan's to say."""
    plan = parsed(folder, networks='published = ["chest-clinic", "sprinkler"]', data="datasets = 7")

    assert factors(plan) == [
        {"published": "chest-clinic"},
        {"published": "sprinkler"},
    ]
    assert expected_runs(plan) == 2 * 7 * 7


def test_what_is_told_is_a_factor_of_the_data() -> None:
    """Its levels cross with those of the networks, defaults are left out, and a short text names each."""
    levels = "[{}, {arcs = 0.2, stages = false}, {arcs = 0, excluded = 1, stages = 3, wrong = 0.05}]"

    plan = parse_plan(plan_of(networks="variables = [5, 6]", data=f"knowledge = {levels}"))

    told = [{}, {"arcs": 0.2}, {"excluded": 1.0, "stages": 3, "wrong": 0.05}]
    assert [dict(condition.data) for condition in plan.conditions] == 2 * [
        {"knowledge": level} if level else {} for level in told
    ]
    assert factors(plan) == [
        {"variables": variables, "knowledge": text}
        for variables in (5, 6)
        for text in ("none", "arcs 0.2", "excluded 1.0, stages 3, wrong 0.05")
    ]
    assert [note for note in plan.notes if "Told" in note] == [
        "Told to learners beforehand: nothing; or 20 % of the true arcs; or 100 % of the arcs that are not "
        "there, as excluded, stages in 3 waves, 5 % of each wrong."
    ]


def test_levels_of_what_is_told_that_say_the_same_are_one() -> None:
    """Nothing told is nothing told, however it is written; one level is no factor and no key."""
    levels = "[{}, {arcs = 0}, {stages = false}, {arcs = 0.0, wrong = 0.5}]"

    plan = parse_plan(plan_of(data=f"knowledge = {levels}"))

    assert [dict(condition.data) for condition in plan.conditions] == [{}]
    assert factors(plan) == [{}]
    assert not any("Told" in note for note in plan.notes)


def test_a_single_table_of_what_is_told_is_no_factor() -> None:
    """It holds in every condition."""
    plan = parse_plan(plan_of(networks="variables = [5, 6]", data="knowledge = {stages = true}"))

    assert factors(plan) == [{"variables": 5}, {"variables": 6}]
    assert [dict(condition.data) for condition in plan.conditions] == 2 * [{"knowledge": {"stages": True}}]


def test_what_is_told_can_come_from_a_file_beside_the_plan(folder: Path) -> None:
    """Its statements are what counts, in one order; two files that say the same are one level."""
    (folder / "one.toml").write_text('arcs = [["rain", "wet_grass"], ["cloudy", "rain"]]')
    (folder / "two.toml").write_text('arcs = [["cloudy", "rain"], ["rain", "wet_grass"]]\nstages = []')
    levels = '[{file = "one.toml"}, {file = "two.toml"}, {}]'

    plan = parsed(folder, networks='published = "sprinkler"', data=f"knowledge = {levels}")

    arcs = [["cloudy", "rain"], ["rain", "wet_grass"]]
    assert [dict(condition.data) for condition in plan.conditions] == [
        {"knowledge": {"statements": {"arcs": arcs}}},
        {},
    ]
    assert factors(plan) == [{"knowledge": "file one.toml"}, {"knowledge": "none"}]
    assert plan.notes == ("Told to learners beforehand: arcs from a file (2); or nothing.",)


def test_what_is_told_wrong_of_a_given_network_is_noted(folder: Path) -> None:
    """A file may be wrong, on purpose; a reader should know."""
    (folder / "known.toml").write_text(
        'arcs = [["cloudy", "rain"], ["rain", "sprinkler"]]\nstages = [["rain"], ["cloudy", "sprinkler"]]'
    )
    with pytest.raises(InputError, match=r"arcs lead from 'cloudy', which stands in stages\[2\], to 'rain'"):
        parsed(folder, networks='published = "sprinkler"', data='knowledge = {file = "known.toml"}')
    (folder / "known.toml").write_text(
        'arcs = [["rain", "sprinkler"]]\nstages = [["rain"], ["cloudy", "sprinkler"]]'
    )

    plan = parsed(folder, networks='published = "sprinkler"', data='knowledge = {file = "known.toml"}')

    # The true arcs are cloudy -> sprinkler, cloudy -> rain, sprinkler -> wet_grass, rain -> wet_grass.
    assert plan.notes[0] == (
        "what is told of sprinkler is not all true: 1 arcs are told that it has not, and 1 are excluded that "
        "it has."
    )


def test_every_fault_of_a_knowledge_file_is_a_line_of_the_plan(folder: Path) -> None:
    """What its form, its names for each network and its statements have wrong, before anything runs."""
    given = 'published = ["sprinkler", "burglary"]'
    (folder / "form.toml").write_text("arcs = 3\nstage = []")
    (folder / "names.toml").write_text('arcs = [["cloudy", "rian"]]')

    found = faults(
        plan_of(
            networks=given,
            data='knowledge = [{file = "none.toml"}, {file = "form.toml"}, {file = "names.toml"}]',
        ),
        folder,
    )

    assert found == [
        "data.knowledge[1].file: none.toml: no such file.",
        "data.knowledge[2].file: form.toml: stage: unknown key. Did you mean 'stages'?",
        "data.knowledge[2].file: form.toml: arcs: must be a list, got '3'.",
        "data.knowledge[3].file: names.toml, for sprinkler: arcs[1]: 'rian' is not a variable. "
        "Did you mean 'rain'?",
        "data.knowledge[3].file: names.toml, for burglary: arcs[1]: 'cloudy' is not a variable.",
        "data.knowledge[3].file: names.toml, for burglary: arcs[1]: 'rian' is not a variable.",
    ]


def test_too_many_levels_of_what_is_told_are_refused(folder: Path) -> None:
    """They count with those of the networks."""
    levels = ", ".join(f"{{arcs = {number / 1000}}}" for number in range(1, 702))

    found = faults(plan_of(networks="variables = [5, 6, 7]", data=f"knowledge = [{levels}]"), folder)

    assert found == ["data.knowledge: the lists cross to 2103 conditions; at most 2000 are accepted."]


def test_what_a_cap_takes_away_is_noted() -> None:
    """12 variables, 1.5 parents each, at most 4: 17.5 of 18 arcs are left.

    Exact: the sum of E[min(X, 4)] over binomials with 0 to 11 trials and probability 3/11.
    """
    p = 3 / 11
    expected = sum(
        min(k, 4) * math.comb(n, k) * p**k * (1 - p) ** (n - k) for n in range(12) for k in range(n + 1)
    )

    plan = parse_plan(plan_of(networks="variables = 12\nmax_parents = 4"))

    assert round(expected, 1) == 17.5
    assert plan.notes == (
        "random-order networks of 12 variables: 17.5 arcs expected after the cap of 4 parents, "
        "18.0 asked for.",
    )


def test_nothing_is_noted_where_nothing_is_taken_away() -> None:
    """A cap that no variable can reach needs no note."""
    plan = parse_plan(plan_of(networks="variables = 4"))

    assert plan.notes == ()


def test_plans_and_their_parts_can_be_sent_to_workers(folder: Path) -> None:
    """Everything in a plan can be pickled."""
    plan = parse_plan(WHOLE, folder / "plan.toml")

    assert pickle.loads(pickle.dumps(plan)) == plan


def test_a_byte_order_mark_is_no_fault(tmp_path: Path) -> None:
    """Some editors put one in front of every text."""
    (tmp_path / "plan.toml").write_bytes(b"\xef\xbb\xbf" + plan_of(top='title = "A"').encode())

    assert read_plan(tmp_path / "plan.toml").title == "A"


# The density of `chance`


def test_chance_is_called_with_the_density_of_the_condition() -> None:
    """After the cap, not as asked; the learner's own settings and key stay as they are."""
    plan = parse_plan(plan_of(networks="variables = [6, 12]", learners='[[learner]]\nmethod = "chance"'))
    learner = plan.learners[0]

    densities = [settings_for(learner, condition)["mean_parents"] for condition in plan.conditions]

    assert [round(6 * densities[0], 1), round(12 * densities[1], 1)] == [7.2, 16.3]
    assert dict(learner.settings) == {}


@pytest.mark.parametrize("density", [0.0, 0.5, 1.0, 1.2, 1.5, 2.0])
def test_a_density_that_the_plan_gives_to_chance_holds(density: float) -> None:
    """What the plan says goes before what the condition suggests, whatever the number."""
    plan = parse_plan(plan_of(learners=f'[[learner]]\nmethod = "chance"\nmean_parents = {density}'))

    assert settings_for(plan.learners[0], plan.conditions[0]) == {"mean_parents": density}


def test_other_learners_are_called_with_their_settings_alone(folder: Path) -> None:
    """Also a stranger's that is called chance."""
    plan = parsed(folder, learners='[[learner]]\nsource = "my_learner.py:learn"\ndepth = 2')
    learner = plan.learners[0]

    assert settings_for(learner, plan.conditions[0]) == {"depth": 2}
    assert settings_for(replace(learner, method="chance"), plan.conditions[0]) == {"depth": 2}


def test_the_density_of_a_given_network_is_its_own() -> None:
    """The chest clinic of Lauritzen and Spiegelhalter (1988) has 8 arcs on 8 variables."""
    assert mean_parents({"published": "chest-clinic"}) == 1.0


def test_the_density_of_another_topology_is_that_of_drawn_graphs() -> None:
    """Uniform DAGs on 2 variables: three of them, two with an arc, so 1/3 of an arc per variable.

    200 draws: a standard error of .017, so that .1 is six of them.
    """
    density = mean_parents({"topology": "uniform", "variables": 2})

    assert abs(density - 1 / 3) < 0.1
    assert density == mean_parents({"variables": 2, "topology": "uniform"})


# A draft


@pytest.mark.parametrize("variables", [2, 12, 50, 200])
def test_a_draft_is_a_sound_plan(variables: int, tmp_path: Path) -> None:
    """It reads as it is, and says the same as the defaults do."""
    path = tmp_path / "plan.toml"
    path.write_text(draft_plan(variables))
    least = parse_plan(plan_of(networks=f"variables = {variables}"))

    plan = read_plan(path)

    assert plan.conditions == least.conditions
    assert (plan.rows, plan.requirement, plan.limits) == (least.rows, least.requirement, least.limits)
    assert [learner.method for learner in plan.learners] == [
        "no-arcs",
        "chance",
        "chow-liu",
        "pc",
        "hill-climbing",
    ]


@pytest.mark.parametrize("variables", [1, 5001, "12"])
def test_a_draft_for_an_impossible_number_of_variables_is_refused(variables: Any) -> None:
    """In one line that says what is accepted."""
    with pytest.raises(InputError) as caught:
        draft_plan(variables)

    assert str(caught.value) == f"variables: must be a whole number between 2 and 5000, got {variables!r}"


# What can be wrong


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("title = \n", "1:9: Invalid value."),
        ("title = 'a'\nseed = 1 2\n", "2:10: Expected newline or end of document after a statement."),
        ("seed = 1\nseed = 2", "2:9: Cannot overwrite a value."),
        ("title = 'a", '1:11: Expected "\'".'),
        ("[networks", "1:10: Expected ']' at the end of a table declaration."),
    ],
)
def test_what_is_no_toml_is_placed_by_line_and_column(text: str, expected: str, tmp_path: Path) -> None:
    """Also where the fault is that the text ends."""
    with pytest.raises(InputError) as caught:
        parse_plan(text, tmp_path / "plan.toml")

    assert str(caught.value) == f"plan.toml:{expected}"


def test_a_file_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    """A missing file, a folder and a file that is no text are one line each."""
    (tmp_path / "binary.toml").write_bytes(b"title = 'x'\nseed = '\xff'\n")

    messages = []
    for name in ("none.toml", "", "binary.toml"):
        with pytest.raises(InputError) as caught:
            read_plan(tmp_path / name)
        messages.append(str(caught.value))

    assert messages == [
        f"{tmp_path / 'none.toml'}: cannot be read: No such file or directory",
        f"{tmp_path}: cannot be read: Is a directory",
        "binary.toml:2: is not UTF-8 text, as TOML must be",
    ]


NEEDED = "networks.variables: is required: a whole number between 2 and 5000, or a list of such numbers."
WRONG_TOP = {
    "": [NEEDED, "learner: at least one [[learner]] is needed."],
    plan_of(top="titel = 'x'"): ["titel: unknown key. Did you mean 'title'?"],
    plan_of(top="title = 3"): ["title: must be text, got 3."],
    plan_of(top="zzz = 3"): [
        "zzz: unknown key; accepted: title, seed, networks, data, learner, limits, requirement, gate."
    ],
    plan_of(top="seed = -1"): ["seed: must be a whole number at least 0, got -1."],
    plan_of(top="seed = true"): ["seed: must be a whole number at least 0, got True."],
    plan_of(top=f"seed = 0x{'f' * 5000}\ntitle = [1, {2**63}]"): [
        "seed: must be a number of at most 64 bits.",
        "title[2]: must be a number of at most 64 bits.",
    ],
    "networks = 3\n" + MINE: ["networks: must be a table, got 3.", NEEDED],
    plan_of(top='"a b\\n" = 1'): [
        '"a b\\n": unknown key; accepted: title, seed, networks, data, learner, limits, requirement, gate.'
    ],
}
WRONG_TOP[plan_of(top="learner = 3", learners="")] = [
    "learner: must be written as [[learner]], one such table per learner."
]
WRONG_NETWORKS = {
    "variables = 12\nreplicats = 3": ["networks.replicats: unknown key. Did you mean 'replicates'?"],
    "variables = [12, 1]": ["networks.variables[2]: must be a whole number between 2 and 5000, got 1."],
    "variables = 5001": ["networks.variables: must be a whole number between 2 and 5000, got 5001."],
    "variables = []": ["networks.variables: a list must have at least one item, got []."],
    "variables = [[12]]": ["networks.variables[1]: must be a whole number between 2 and 5000, got [12]."],
    "variables = 6\nreplicates = [1, 2]": [
        "networks.replicates: must be a whole number between 1 and 100000, got [1, 2]."
    ],
    "variables = 6\nreplicates = 0": [
        "networks.replicates: must be a whole number between 1 and 100000, got 0."
    ],
    "variables = 6\ntopology = 'random-ordr'": [
        "networks.topology: unknown topology 'random-ordr'. Did you mean 'random-order'?"
    ],
    "variables = 6\ntopology = ['uniform', 3]": [
        "networks.topology[2]: must be the name of a topology, got 3."
    ],
    "variables = 6\ncpts = 'dirichlett'": [
        "networks.cpts: unknown CPT family 'dirichlett'. Did you mean 'dirichlet'?"
    ],
    "variables = 6\nstates = ['2-3', '3-2']": [
        "networks.states[2]: must be a whole number from 2 to 65535 or a range such as '2-3', got '3-2'."
    ],
    "variables = 6\nmean_parents = -1": ["networks.mean_parents: must be a number at least 0, got -1."],
    "variables = 6\nmean_parents = 'x'": ["networks.mean_parents: must be a number at least 0, got 'x'."],
    "variables = 6\nconcentration = [1, 0]": ["networks.concentration[2]: must be a number above 0, got 0."],
    "variables = 6\nconcentration = inf": ["networks.concentration: must be a number above 0, got inf."],
    "variables = 6\ntopology = 'uniform'\nmean_parents = 1": [
        "networks.mean_parents: is a setting of 'random-order', which no condition uses "
        "('uniform', 'dirichlet')."
    ],
    "variables = [3, 4]\nmean_parents = 1.5": [
        "networks.mean_parents: a DAG on 3 variables has at most 1 parents on average, got 1.5."
    ],
    "variables = 101\ntopology = 'uniform'": [
        "networks.variables: topology 'uniform' draws at most 100, got 101; the exact counts of DAGs that it "
        "needs grow too large beyond."
    ],
    f"variables = {list(range(2, 102))}\nmean_parents = {[k / 64 for k in range(21)]}": [
        "networks: the lists cross to 2100 conditions; at most 2000 are accepted."
    ],
    "variables = 6\nmissing = 0.1": [
        "networks.missing: unknown key; accepted: variables, topology, states, cpts, replicates, file, "
        "published, mean_parents, max_parents, concentration."
    ],
    "file = 'none.bif'": ["networks.file: no such file: 'none.bif'."],
    "file = ['none.bif', 3, \"\\u0000\"]": [
        "networks.file[1]: no such file: 'none.bif'.",
        "networks.file[2]: must be text, got 3.",
        "networks.file[3]: no such file: '\\x00'.",
    ],
    "file = 'my_learner.py'": [
        "networks.file: my_learner.py: a network file must end in one of .bif, .json."
    ],
    "file = 'broken.bif'": [
        "networks.file: broken.bif:3:27: expected 2 probabilities for the table of 'a', found 1."
    ],
    "published = 'chest-clinik'": [
        "networks.published: unknown network 'chest-clinik'. Did you mean 'chest-clinic'?"
    ],
    "published = 'chest-clinic'\nreplicates = 3": [
        "networks.replicates: is for drawn networks; of a given one, say how many in data.datasets."
    ],
    "published = 'chest-clinic'\nvariables = 3\nmean_parents = 1": [
        "networks.variables: is for drawn networks; 'published' gives one.",
        "networks.mean_parents: is for drawn networks; 'published' gives one.",
    ],
    "published = 'chest-clinic'\nfiles = 'x'": ["networks.files: unknown key. Did you mean 'file'?"],
    "published = 'chest-clinic'\nfile = 'none.bif'": [
        "networks.published: 'file' is there too; a plan takes one of them.",
        "networks.file: no such file: 'none.bif'.",
    ],
}
WRONG_DATA = {
    "rows = [100, 200, 100]": ["data.rows[3]: 100 stands twice; row counts must differ."],
    "rows = []": ["data.rows: a list must have at least one item, got []."],
    "rows = [100, 0]": ["data.rows[2]: must be a whole number at least 1, got 0."],
    "rows = 10.5": ["data.rows: must be a whole number at least 1, got 10.5."],
    "rows = 1431655766": [
        "data.rows: 1431655766 rows of 6 variables are 8589934596 cells; at most 8589934592 are accepted."
    ],
    "datasets = 0": ["data.datasets: must be a whole number between 1 and 100000, got 0."],
    "dataset = 1": ["data.dataset: unknown key. Did you mean 'datasets'?"],
    "missing = 0.1": ["data.missing: unknown key; accepted: rows, datasets, knowledge."],
    "knowledge = 0.2": [
        "data.knowledge: must be a table such as {arcs = 0.2, stages = true}, or a list of them, got 0.2."
    ],
    "knowledge = []": ["data.knowledge: a list must have at least one item, got []."],
    "knowledge = [{arcs = 1.5, exclude = 0.1}, 'all', {stages = 1, wrong = -1, excluded = '1'}]": [
        "data.knowledge[1].exclude: unknown key. Did you mean 'excluded'?",
        "data.knowledge[1].arcs: must be a number between 0 and 1, got 1.5.",
        "data.knowledge[2]: must be a table such as {arcs = 0.2, stages = true}, or a list of them, got "
        "'all'.",
        "data.knowledge[3].excluded: must be a number between 0 and 1, got '1'.",
        "data.knowledge[3].stages: must be true, false or a whole number at least 2, got 1.",
        "data.knowledge[3].wrong: must be a number between 0 and 1, got -1.",
    ],
    "knowledge = {wrong = 0.05}": [
        "data.knowledge.wrong: is a share of what is told, and nothing is told here."
    ],
    "knowledge = {file = 'known.toml', arcs = 0.2}": [
        "data.knowledge.arcs: is not for what a file says, which is told as it stands.",
        "data.knowledge.file: is for given networks; drawn ones have variables of their own.",
    ],
}
METHODS = ", ".join(sorted(BUILT_IN))
WRONG_LEARNERS = {
    "[learner]\nmethod = 'pc'": ["learner: must be written as [[learner]], one such table per learner."],
    "[[learner]]": ["learner[1]: needs a method or a source."],
    f"{MINE}method = 'pc'": ["learner[1]: gives both a method and a source; one is accepted."],
    "[[learner]]\nmethod = 'hill-climb'": [
        "learner[1].method: unknown method 'hill-climb'. Did you mean 'hill-climbing'?"
    ],
    "[[learner]]\nmethod = 'zzz'": [f"learner[1].method: unknown method 'zzz'; accepted: {METHODS}."],
    "[[learner]]\nmethod = 3": ["learner[1].method: must be text, got 3."],
    "[[learner]]\nmethod = 'no-arcs'\n[[learner]]\nmethod = 'pc'\nalpha = -3": [
        "learner[2].alpha: must be a number strictly between 0 and 1, got -3."
    ],
    f"{MINE}alpha = -3": ["learner[1].alpha: must be a number between 0 and 1, got -3."],
    f"{MINE}alpha = [0.1, 0.2]": ["learner[1].alpha: must be a number between 0 and 1, got [0.1, 0.2]."],
    f"{MINE}test = 'g3'": ["learner[1].test: must be one of g2, pearson, got 'g3'."],
    f"{MINE}fast = 1": ["learner[1].fast: must be true or false, got 1."],
    f"{MINE}alpa = 0.1": ["learner[1].alpa: unknown key. Did you mean 'alpha'?"],
    f"{MINE}command = ['x']": [
        "learner[1].command: unknown key; accepted: method, source, label, vary, seconds, memory_mb, "
        "threads, alpha, depth, fast, test."
    ],
    f"{MINE}label = ''": ["learner[1].label: must be 1 to 80 printable characters, got ''."],
    f'{MINE}label = "a\\nb"': ["learner[1].label: must be 1 to 80 printable characters, got 'a\\nb'."],
    f"{MINE}vary = 3": ["learner[1].vary: must be a table, got 3."],
    f"{MINE}vary = {{alpha = 0.1}}": ["learner[1].vary.alpha: must be a list of values, got 0.1."],
    f"{MINE}vary = {{alpha = []}}": ["learner[1].vary.alpha: a list must have at least one item, got []."],
    f"{MINE}vary = {{alpha = [0.1, 7]}}": [
        "learner[1].vary.alpha[2]: must be a number between 0 and 1, got 7."
    ],
    f"{MINE}vary = {{alfa = [0.1]}}": ["learner[1].vary.alfa: unknown key. Did you mean 'alpha'?"],
    f"{MINE}alpha = 0.1\nvary = {{alpha = [0.1]}}": [
        "learner[1].vary.alpha: is given outside vary too, as 0.1."
    ],
    f"{MINE}vary = {{depth = {list(range(201))}}}": [
        "learner[1].vary: makes 201 learners; at most 200 are accepted."
    ],
    '[[learner]]\nsource = "my_learner.py:needy"': [
        "learner[1].depth: is required by 'my_learner.py:needy': a whole number."
    ],
    f"{MINE}seconds = 0\nmemory_mb = 256\nthreads = 0.5": [
        "learner[1].seconds: must be a number above 0, got 0.",
        "learner[1].memory_mb: must be a whole number at least 512, got 256.",
        "learner[1].threads: must be a whole number between 1 and 1024, got 0.5.",
    ],
    '[[learner]]\nsource = "my_lerner.py:learn"': [
        "learner[1].source: no such file: 'my_lerner.py'. Did you mean 'my_learner.py'?"
    ],
    '[[learner]]\nsource = "my_learner.py:lern"': [
        "learner[1].source: my_learner.py has no 'lern'. Did you mean 'learn'?"
    ],
    '[[learner]]\nsource = "raising.py:learn"': [
        "learner[1].source: raising.py:2: ZeroDivisionError while importing: division by zero."
    ],
    f"{MINE}label = 'A'\n{MINE}label = 'A'\nalpha = 0.2": [
        "learner[2].label: 'A' is the label of learner[1] already; labels must differ."
    ],
    f"{MINE}label = 'A'\n{MINE}label = 'B'\nseconds = 3": [
        "learner[2]: is the method of learner[1] with the same settings; "
        "labels and limits make no other learner."
    ],
}
WRONG_LIMITS = {
    "memory_mb = 100": ["limits.memory_mb: must be a whole number at least 512, got 100."],
    "seconds = nan": ["limits.seconds: must be a number above 0, got nan."],
    "second = 3": ["limits.second: unknown key. Did you mean 'seconds'?"],
}
AS_IN = "must be MEASURE, one of >= <= > <, and a number, as in 'skeleton_recall >= 0.7'"
BOUNDS = "['skeleton_recall >= 0.7', 'skeleton_precision >= 0.8']"
WRONG_REQUIREMENT = {
    "bounds = 'skeleton_recall >= 0.7'": [
        f"requirement.bounds: must be a list such as {BOUNDS}, got 'skeleton_recall >= 0.7'."
    ],
    "bounds = []": [f"requirement.bounds: must be a list such as {BOUNDS}, got []."],
    "bounds = ['imap', 'imap == 1', 'class_shd < inf', 3, 'skeleton_recall[strength >= 1] >= 1']": [
        f"requirement.bounds[1]: {AS_IN}, got 'imap'.",
        f"requirement.bounds[2]: {AS_IN}, got 'imap == 1'.",
        f"requirement.bounds[3]: {AS_IN}, got 'class_shd < inf'.",
        f"requirement.bounds[4]: {AS_IN}, got 3.",
        f"requirement.bounds[5]: {AS_IN}, got 'skeleton_recall[strength >= 1] >= 1'.",
    ],
    "bounds = ['skeleton_recal >= 0.7']": [
        "requirement.bounds[1]: unknown measure 'skeleton_recal'. Did you mean 'skeleton_recall'?"
    ],
    "bounds = ['skeleton_recall >= 70', 'class_shd <= -1']": [
        "requirement.bounds[1]: must name a value that skeleton_recall can have, between 0 and 1, got "
        "'skeleton_recall >= 70'.",
        "requirement.bounds[2]: must name a value that class_shd can have, at least 0, got "
        "'class_shd <= -1'.",
    ],
    "assurance = 1\nconfidence = 0\nprecision = 2\nmax_rows = 0\nmax_runs = 100\nmax_failed = -0.1": [
        "requirement.assurance: must be a number strictly between 0 and 1, got 1.",
        "requirement.confidence: must be a number strictly between 0 and 1, got 0.",
        "requirement.precision: must be a number strictly between 0 and 1, got 2.",
        "requirement.max_rows: must be a whole number at least 1, got 0.",
        "requirement.max_runs: must be a whole number at least 3000, got 100.",
        "requirement.max_failed: must be a number between 0 and 1, got -0.1.",
    ],
    "max_rows = 1431655766": [
        "requirement.max_rows: 1431655766 rows of 6 variables are 8589934596 cells; at most 8589934592 are "
        "accepted."
    ],
    "asurance = 0.8": ["requirement.asurance: unknown key. Did you mean 'assurance'?"],
}
WRONG_GATE = {
    "margin = 3": ["gate.margin: must be a table, got 3."],
    "margin = {class_shd = 0, class_sdh = 1}": [
        "gate.margin.class_shd: must be a number above 0, got 0.",
        "gate.margin.class_sdh: unknown measure 'class_sdh'. Did you mean 'class_shd'?",
    ],
    "slower = 1": ["gate.slower: must be a number above 1, got 1."],
    "error = 1.5": ["gate.error: must be a number strictly between 0 and 1, got 1.5."],
    "reference = 'no-arc'": ["gate.reference: unknown label 'no-arc'. Did you mean 'no-arcs'?"],
    "reference = 'A'\n[[learner]]\nmethod = 'pcc'": [
        "learner[2].method: unknown method 'pcc'. Did you mean 'pc'?"
    ],
    "marginn = {class_shd = 1}": ["gate.marginn: unknown key. Did you mean 'margin'?"],
}
WRONG = [
    *WRONG_TOP.items(),
    *((plan_of(networks=part), lines) for part, lines in WRONG_NETWORKS.items()),
    *((plan_of(data=part), lines) for part, lines in WRONG_DATA.items()),
    *((plan_of(learners=part), lines) for part, lines in WRONG_LEARNERS.items()),
    *((plan_of(rest=f"[limits]\n{part}"), lines) for part, lines in WRONG_LIMITS.items()),
    *((plan_of(rest=f"[requirement]\n{part}"), lines) for part, lines in WRONG_REQUIREMENT.items()),
    *((plan_of(rest=f"[gate]\n{part}"), lines) for part, lines in WRONG_GATE.items()),
]


@pytest.mark.parametrize(("text", "expected"), WRONG)
def test_each_fault_is_said_with_place_finding_and_what_is_accepted(
    text: str, expected: list[str], folder: Path
) -> None:
    """One line for each fault and no line more."""
    (folder / "broken.bif").write_text(BROKEN_BIF)
    (folder / "raising.py").write_text("x = 1\nx / 0\n")

    assert faults(text, folder) == expected


def test_all_faults_are_said_at_once(folder: Path) -> None:
    """A plan with twenty faults needs one reading, not twenty."""
    text = """
        titel = "x"
        seed = "x"
        [networks]
        variables = [1, 6]
        topology = "random"
        states = 1
        mean_parents = -1
        replicats = 3
        [data]
        rows = [0, 10, 10]
        datasets = 0
        [[learner]]
        method = "pcc"
        [[learner]]
        source = "none.py:learn"
        seconds = -1
        [[learner]]
        source = "my_learner.py:learn"
        alpha = 2
        tset = "g2"
        [limits]
        memory_mb = 1
        [requirement]
        bounds = ["x >= 1", "class_shd"]
        assurance = 80
        [gate]
        margin = {class_shd = -1}
        slower = 0
    """

    found = faults(text, folder)

    assert [line.partition(": ")[0] for line in found] == [
        "titel",
        "seed",
        "networks.variables[1]",
        "networks.topology",
        "networks.states",
        "networks.mean_parents",
        "networks.replicats",
        "data.datasets",
        "data.rows[1]",
        "data.rows[3]",
        "limits.memory_mb",
        "learner[1].method",
        "learner[2].seconds",
        "learner[2].source",
        "learner[3].tset",
        "learner[3].alpha",
        "requirement.assurance",
        "requirement.bounds[1]",
        "requirement.bounds[2]",
        "gate.slower",
        "gate.margin.class_shd",
    ]


# Whatever is written


SNIPPETS = """\
[networks] | [[learner]] | [data] | [limits] | [gate] | [requirement] | variables | rows | method | file
| source | vary | bounds | margin | states | = | . | 'pc' | 3 | -1 | 1e400 | 0xffffffffffffffffffff | nan | {
| } | [ | ] | , | \n | " | ' | true | 1979-05-27 | # | \\u0000 | \x00 | \u00e9"""
LEAVES = """\
1 | -1 | 0.5 | '' | 'pc' | '2-3' | true | nan | inf | 1979-05-27 | '\\x' | 'a.py:b' | 'a.b:c'
| 'class_shd <= 3' | '\U0001f41d' | "a\\nb" | "\\u0000" | "\\u0000.py:b" """
KEYS = """\
title seed networks data learner limits requirement gate variables topology cpts states
mean_parents replicates file published rows datasets knowledge method source label vary alpha seconds
memory_mb threads bounds assurance margin reference "\\n" """
TABLES = st.sampled_from(["", "[networks]", "[data]", "[[learner]]", "[limits]", "[requirement]", "[gate]"])
VALUES = st.recursive(
    st.sampled_from([*LEAVES.split("| "), "9" * 30, "0x" + "f" * 5000]),
    lambda inner: (
        st.lists(inner, max_size=3).map(lambda items: f"[{', '.join(items)}]")
        | st.dictionaries(
            st.sampled_from(["alpha", "class_shd", '""', "'a b'", "arcs", "stages", "wrong", "file"]),
            inner,
            max_size=2,
        ).map(lambda items: "{" + ", ".join(f"{key} = {value}" for key, value in items.items()) + "}")
    ),
    max_leaves=4,
)
JUNK = st.sampled_from([*SNIPPETS.split("| "), "9" * 5000]) | st.text(max_size=3)


def read_or_refuse(text: str) -> None:
    """Read a plan; only an input error, of lines, may come of it."""
    found: tuple[str, ...] = ("read",)
    try:
        parse_plan(text)
    except InputError as error:
        found = error.faults
    assert found
    assert not any("\n" in fault for fault in found)


@given(st.lists(JUNK, max_size=25).map(" ".join))
def test_any_text_is_read_or_refused(text: str) -> None:
    """No text raises anything but an input error."""
    read_or_refuse(text)


@given(
    st.lists(
        st.tuples(TABLES, st.dictionaries(st.sampled_from(KEYS.split()), VALUES, max_size=4)), max_size=5
    )
)
def test_any_tables_are_read_or_refused(tables: list[tuple[str, dict[str, str]]]) -> None:
    """No value of any type under any key raises anything but an input error."""
    lines = [
        line
        for table, keys in tables
        for line in (table, *(f"{key} = {value}" for key, value in keys.items()))
    ]

    read_or_refuse("\n".join(lines))


@given(st.data())
def test_a_sound_plan_with_a_slip_is_read_or_refused(data: st.DataObject) -> None:
    """Cut, doubled or replaced text in a sound plan raises nothing but an input error."""
    text = WHOLE.replace('source = "my_learner.py:learn"', 'method = "no-arcs"').replace("[12, 24]", "[4, 5]")
    start = data.draw(st.integers(0, len(text)))
    end = data.draw(st.integers(start, min(len(text), start + 30)))
    piece = data.draw(st.sampled_from(["", text[start:end] * 2, "x", "-", "[]", "{}", "''", "0", "."]))

    read_or_refuse(text[:start] + piece + text[end:])


def test_deep_nesting_is_refused() -> None:
    """A text that would exhaust the stack is an input error."""
    with pytest.raises(InputError, match=r"^plan: is nested too deeply\.$"):
        parse_plan(f"title = {'[' * 100_000}")


def test_a_network_given_twice_is_refused(tmp_path: Path) -> None:
    """Two files that hold one network, in whatever format, are one condition too many."""
    for name in ("one.bif", "two.json"):
        write_network(published_network("sprinkler"), tmp_path / name)
    (tmp_path / "plan.toml").write_text(
        '[networks]\nfile = ["one.bif", "two.json"]\n[[learner]]\nmethod = "no-arcs"\n'
    )

    with pytest.raises(InputError) as caught:
        read_plan(tmp_path / "plan.toml")

    assert caught.value.faults == ("plan.toml: networks.file: 'two.json' is the same network as 'one.bif'.",)
