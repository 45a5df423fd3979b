"""Learners from files and modules: found, told apart by their code, and refused in one line."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from generators.dataset import Dataset
from generators.errors import InputError
from harness.knowledge import Knowledge
from harness.learners.builtin import BUILT_IN, built_in
from harness.learners.sources import folder_of, load, needs_isolation, own_folder, resolve
from harness.learners.specification import call
from harness.records import Learner, Limits

DATA = Dataset(("a", "b"), (("0", "1"), ("0", "1")), np.array([[0, 1], [1, 0]], dtype=np.uint8))

SOUND = """\
from generators.graph import Graph

def learn(data, *, alpha: float = 0.05, rng):
    "Return one arc."
    return Graph.from_edges(data.names, directed=[data.names])
"""


def write(folder: Path, **files: str) -> Path:
    """Write Python files by their paths without the ending."""
    for name, text in files.items():
        path = folder / f"{name}.py"
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text)
    return folder


def returning(expression: str, imports: str = "") -> str:
    """Give the text of a learner's file that evaluates an expression when it is called."""
    return f"{imports}\ndef learn(data, *, rng):\n    return {expression}\n"


def value(folder: Path, source: str = "own.py:learn") -> object:
    """Call a learner whose function returns any value."""
    return resolve(None, source, folder).specification.function(DATA, rng=None)


def digest_of(folder: Path) -> str:
    return resolve(None, "own.py:learn", folder).digest


def as_learner(folder: Path, source: str = "own.py:learn") -> Learner:
    found = resolve(None, source, folder)
    return Learner(
        "label", found.method, found.source, {}, "pdag", "class", 1, found.digest, Limits(), b"\0" * 16
    )


@pytest.mark.parametrize("name", BUILT_IN)
def test_every_built_in_method_carries_its_name(name: str) -> None:
    """The table's names are those that the functions declare."""
    specification = built_in(name)

    assert name == specification.name


def test_an_unknown_method_is_refused_with_the_nearest_name() -> None:
    """A slip of the pen in a method's name is answered with the name that was meant."""
    with pytest.raises(InputError) as caught:
        built_in("hill-climbin")

    accepted = ", ".join(sorted(BUILT_IN))
    expected = f"unknown method 'hill-climbin'; accepted: {accepted}. Did you mean 'hill-climbing'?"
    assert expected == str(caught.value)


def test_a_file_gives_a_learner_that_can_be_called(tmp_path: Path) -> None:
    """A plain function in a file is a learner; its settings come from its signature."""
    write(tmp_path, own=SOUND)

    found = resolve(None, "own.py:learn", tmp_path)
    answer = call(found.specification, DATA, {"alpha": 0.01}, np.random.default_rng(1))

    assert tuple(answer.graph.edges()) == (("a", "b", "directed"),)
    assert list(found.specification.settings) == ["alpha"]
    assert found.method == "own.py:learn"
    assert f"{tmp_path / 'own.py'}:learn" == found.source


def test_knowledge_is_handed_to_learners_that_take_it(tmp_path: Path) -> None:
    """It is an argument of its own, no setting; a learner without it is called as ever."""
    taking = (
        "from generators.graph import Graph\n"
        "def learn(data, *, alpha: float = 0.05, knowledge):\n"
        "    if knowledge is None:\n"
        "        return Graph.from_edges(data.names)\n"
        "    return Graph(data.names, knowledge.arcs)\n"
    )
    write(tmp_path, own=SOUND, taking=taking)
    known = Knowledge.of(DATA.names, arcs=[("b", "a")])
    rng = np.random.default_rng(1)

    takes, other = (resolve(None, f"{name}.py:learn", tmp_path).specification for name in ("taking", "own"))

    assert (takes.takes_knowledge, other.takes_knowledge) == (True, False)
    assert list(takes.settings) == ["alpha"]
    assert call(takes, DATA, {}, rng, known).graph.edges() == (("b", "a", "directed"),)
    assert call(takes, DATA, {}, rng).graph.edges() == ()
    assert call(other, DATA, {}, rng, known).graph.edges() == (("a", "b", "directed"),)


def test_a_path_is_relative_to_the_given_folder(tmp_path: Path) -> None:
    """A plan may keep its learners in a folder beside it; their name is that of the file alone."""
    write(tmp_path, **{"sub/own": SOUND})

    found = resolve(None, "sub/own.py:learn", tmp_path)

    assert found.method == "own.py:learn"


def test_the_digest_is_that_of_the_code_alone(tmp_path: Path) -> None:
    """A copy of the folder elsewhere has the same digest: no path is in it."""
    first = write(tmp_path / "one", own=SOUND, helper="A = 1\n")
    second = write(tmp_path / "two", own=SOUND, helper="A = 1\n")

    assert digest_of(first) == digest_of(second)


@pytest.mark.parametrize("changed", ["own", "helper", "package/part", "package/inner/deep"])
def test_the_digest_covers_the_file_and_the_modules_of_its_folder(tmp_path: Path, changed: str) -> None:
    """A change in the file, a module beside it or a package beside it makes another learner."""
    write(tmp_path, own=SOUND, helper="A = 1\n", **{"package/__init__": "", "package/inner/__init__": ""})
    write(tmp_path, **{"package/part": "A = 1\n", "package/inner/deep": "A = 1\n"})
    before = digest_of(tmp_path)

    path = tmp_path / f"{changed}.py"
    path.write_text(path.read_text() + "B = 2\n")

    assert before != digest_of(tmp_path)


@pytest.mark.parametrize("other", ["notes.txt", "scripts/tool.py", ".hidden.py", "deep/package/__init__.py"])
def test_the_digest_leaves_out_what_is_no_module_of_the_folder(tmp_path: Path, other: str) -> None:
    """Data files, hidden files and subfolders that are no packages do not make another learner."""
    write(tmp_path, own=SOUND)
    before = digest_of(tmp_path)

    path = tmp_path / other
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text("A = 1\n")

    assert before == digest_of(tmp_path)


def test_a_file_is_run_once_for_each_digest(tmp_path: Path) -> None:
    """Asking again for an unchanged file does not run it again."""
    write(tmp_path, own=f"with open({str(tmp_path / 'runs')!r}, 'a') as runs:\n    runs.write('x')\n{SOUND}")

    first = resolve(None, "own.py:learn", tmp_path)
    second = resolve(None, "own.py:learn", tmp_path)

    assert (tmp_path / "runs").read_text() == "x"
    assert first.specification.function is second.specification.function


def test_a_changed_file_is_run_again_at_once(tmp_path: Path) -> None:
    """Code of the same length written within the same second is not taken for the old one."""
    write(tmp_path, own=returning("helper.A, 1", "import helper"), helper="A = 1\n")
    assert value(tmp_path) == (1, 1)

    write(tmp_path, own=returning("helper.A, 2", "import helper"), helper="A = 2\n")

    assert value(tmp_path) == (2, 2)


def test_two_learners_may_each_have_a_helper_of_the_same_name(tmp_path: Path) -> None:
    """A module beside one learner is not seen by another in another folder."""
    for name in ("one", "two"):
        write(
            tmp_path / name,
            own=returning("helper.A, part.A", "import helper\nfrom tools import part"),
            helper=f"A = {name!r}\n",
            **{"tools/__init__": "", "tools/part": f"A = {name!r}\n"},
        )

    values = [value(tmp_path / name) for name in ("one", "two", "one")]

    assert values == [("one", "one"), ("two", "two"), ("one", "one")]


def test_an_import_leaves_nothing_behind(tmp_path: Path) -> None:
    """The search path, the modules' table and the folder are afterwards as they were before."""
    write(tmp_path, own=returning("helper.A", "import helper"), helper="A = 1\n")
    path, modules = list(sys.path), set(sys.modules)

    resolve(None, "own.py:learn", tmp_path)

    assert path == sys.path
    assert [name[:17] for name in set(sys.modules) - modules] == ["_arcassay_learner"]
    assert sorted(entry.name for entry in tmp_path.iterdir()) == ["helper.py", "own.py"]


def test_a_package_that_was_there_before_keeps_its_new_modules(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Half a package is not forgotten when a learner beside it imports more of it."""
    write(tmp_path, **{"arcassay_test_tools/__init__": "", "arcassay_test_tools/part": "A = 1\n"})
    write(tmp_path, own=returning("part.A", "from arcassay_test_tools import part"))
    monkeypatch.syspath_prepend(str(tmp_path))
    import arcassay_test_tools  # type: ignore[import-not-found]

    resolve(None, "own.py:learn", tmp_path)

    assert arcassay_test_tools.part is sys.modules["arcassay_test_tools.part"]


def test_an_import_inside_the_function_works_within_own_folder(tmp_path: Path) -> None:
    """Whoever calls a learner within `own_folder` lets it import its neighbours late."""
    write(tmp_path, own=returning("__import__('late_helper').A"), late_helper="A = 5\n")
    learner = as_learner(tmp_path)
    function = load(learner).function

    with own_folder(folder_of(learner)):
        late = function(DATA, rng=None)

    assert late == 5
    assert "late_helper" not in sys.modules


def test_a_file_may_define_dataclasses(tmp_path: Path) -> None:
    """What looks its own module up while it is defined finds it."""
    imports = "from __future__ import annotations\nfrom dataclasses import dataclass\n\n"
    text = f"{imports}@dataclass(slots=True)\nclass Own:\n    size: int = 3\n{returning('Own().size')}"
    write(tmp_path, own=text)

    assert value(tmp_path) == 3


def test_what_a_file_prints_goes_to_standard_error(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Standard output belongs to the command that is running."""
    write(tmp_path, own=f"print('hello')\n{SOUND}")

    resolve(None, "own.py:learn", tmp_path)

    assert capsys.readouterr() == ("", "hello\n")


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("x = 1\ny = x / 0\n", "own.py:2: ZeroDivisionError while importing: division by zero"),
        (
            "import no_such_thing\n",
            "own.py:1: ModuleNotFoundError while importing: No module named 'no_such_thing'",
        ),
        ("import broken\n", "broken.py:3: ValueError while importing: two lines"),
        ("x = 1\ndef learn(:\n", "own.py:2: SyntaxError while importing: invalid syntax (own.py, line 2)"),
        ("raise SystemExit(3)\n", "own.py:1: SystemExit while importing: 3"),
        (
            "from harness.learners.specification import learner\n"
            "@learner('mine', returns='tree')\ndef learn(data): pass\n",
            "own.py:2: learner 'mine': returns must be one of dag, cpdag, pdag, skeleton, got 'tree'",
        ),
        ("def lern(data): pass\n", "own.py has no 'learn'. Did you mean 'lern'?"),
        ("other = 3\n", "own.py has no 'learn'."),
        ("learn = 3\n", "'learn' in own.py must be a function, got int"),
        (
            "def learn(data, *, weights: list = [1]): pass\n",
            "learner 'learn': setting 'weights' must be annotated bool, int, float, str or Literal texts",
        ),
        (
            "def learn(data, depth, *, alpha=0.1, rng): pass\n",
            "'learn' in own.py cannot be called as learn(data, alpha=..., rng=...): "
            "missing a required argument: 'depth'",
        ),
        (
            "def learn(data, depth, *, knowledge): pass\n",
            "'learn' in own.py cannot be called as learn(data, knowledge=...): "
            "missing a required argument: 'depth'",
        ),
        (
            "def learn(): pass\n",
            "'learn' in own.py cannot be called as learn(data): too many positional arguments",
        ),
    ],
)
def test_a_file_that_is_no_learner_is_refused_in_one_line(tmp_path: Path, text: str, expected: str) -> None:
    """The message names the file, the line and the exception."""
    write(tmp_path, own=text, broken="\n\nraise ValueError('two\\nlines')\n")
    modules = set(sys.modules)

    with pytest.raises(InputError) as caught:
        resolve(None, "own.py:learn", tmp_path)

    assert expected == str(caught.value)
    assert not [name for name in set(sys.modules) - modules if name == "broken"]


@pytest.mark.parametrize(
    ("source", "expected"),
    [
        ("owm.py:learn", "no such file: 'owm.py'. Did you mean 'own.py'?"),
        ("sub/other.py:learn", "no such file: 'sub/other.py'."),
        ("own.py", "must be 'FILE.py:NAME' or 'package.module:NAME', got 'own.py'"),
        ("own.py:", "must be 'FILE.py:NAME' or 'package.module:NAME', got 'own.py:'"),
        ("own.R:learn", "no module named 'own' is installed"),
        ("a b:learn", "must be 'FILE.py:NAME' or 'package.module:NAME', got 'a b:learn'"),
        ("\0.py:learn", "must be 'FILE.py:NAME' or 'package.module:NAME', got '\\x00.py:learn'"),
        (".relative:learn", "must be 'FILE.py:NAME' or 'package.module:NAME', got '.relative:learn'"),
        ("no_such_package.part:learn", "no module named 'no_such_package' is installed"),
        (
            "json.no_such_part:learn",
            "json.no_such_part: ModuleNotFoundError while importing: No module named 'json.no_such_part'",
        ),
        ("json:lods", "json has no 'lods'. Did you mean 'loads'?"),
        ("sys:exit", "the module 'sys' has no file of which a digest could be taken"),
    ],
)
def test_a_source_that_leads_nowhere_is_refused_in_one_line(
    tmp_path: Path, source: str, expected: str
) -> None:
    """The message says what was found, what is accepted, and the nearest name."""
    write(tmp_path, own=SOUND)

    with pytest.raises(InputError) as caught:
        resolve(None, source, tmp_path)

    assert expected == str(caught.value)


def test_a_module_gives_a_learner_whose_digest_covers_its_whole_package(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Every file of the top-level package counts, data files too; byte code does not."""
    write(tmp_path, **{"arcassay_test_pack/__init__": "", "arcassay_test_pack/part/own": SOUND})
    monkeypatch.syspath_prepend(str(tmp_path))
    source = "arcassay_test_pack.part.own:learn"

    found = resolve(None, source, tmp_path)
    (tmp_path / "arcassay_test_pack" / "left.pyc").write_bytes(b"1")
    same = resolve(None, source, tmp_path)
    (tmp_path / "arcassay_test_pack" / "weights.bin").write_bytes(b"1")
    other = resolve(None, source, tmp_path)

    assert (source, source) == (found.method, found.source)
    assert found.specification.name == "learn"
    assert found.digest == same.digest
    assert found.digest != other.digest


def test_a_fault_in_a_module_is_named_with_its_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The place is relative to where the package lies."""
    write(tmp_path, **{"arcassay_test_bad/__init__": "", "arcassay_test_bad/own": "\n1 / 0\n"})
    monkeypatch.syspath_prepend(str(tmp_path))

    with pytest.raises(InputError) as caught:
        resolve(None, "arcassay_test_bad.own:learn", tmp_path)

    expected = "arcassay_test_bad/own.py:2: ZeroDivisionError while importing: division by zero"
    assert expected == str(caught.value)


def test_a_worker_loads_the_learner_that_the_plan_named(tmp_path: Path) -> None:
    """Whatever the working folder, `load` finds the file again."""
    write(tmp_path, own=SOUND)

    specification = load(as_learner(tmp_path))

    assert specification.name == "learn"


def test_code_that_changed_since_the_plan_was_read_is_not_loaded(tmp_path: Path) -> None:
    """Runs of two versions never stand under one key."""
    write(tmp_path, own=SOUND)
    learner = as_learner(tmp_path)
    write(tmp_path, own=f"{SOUND}\n")

    with pytest.raises(InputError, match=r"own.py:learn has changed since the plan was read; start again"):
        load(learner)


def test_only_built_in_methods_share_a_process(tmp_path: Path) -> None:
    """Anybody else's learner needs a process of its own for each run."""
    write(tmp_path, own=SOUND)
    ours = Learner("label", "no-arcs", None, {}, "dag", "class", 1, "", Limits(), b"\0" * 16, True)

    answers = [needs_isolation(learner) for learner in (ours, as_learner(tmp_path))]

    assert answers == [False, True]
    assert load(ours).name == "no-arcs"
