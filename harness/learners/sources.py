"""Learners from elsewhere: a file beside the plan, or a module that is installed.

A source is "FILE.py:NAME" or "package.module:NAME". Its digest is part of the learner's key, so that a
changed learner is another learner:

* of a file, it covers every ``.py`` file of the file's own folder, and of the subfolders that are packages
  (that have an ``__init__.py``), theirs likewise. What is imported when is not asked: an import inside a
  function would be missed. Hidden files, data files and subfolders without ``__init__.py`` are left out.
* of a module, it covers every file of its top-level package (compiled ones too, byte code apart), or the
  one file of a top-level module.
"""

from __future__ import annotations

import contextlib
import hashlib
import importlib
import importlib.util
import inspect
import os
import re
import sys
import traceback
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

from generators.errors import InputError
from generators.settings import nearest
from generators.streams import digest
from harness.learners.builtin import built_in
from harness.learners.specification import Specification, specification_of
from harness.records import Learner

ACCEPTED = "'FILE.py:NAME' or 'package.module:NAME'"
LONGEST_MESSAGE = 300  # of a stranger's exception: it is quoted within one line
_MODULE = re.compile(r"[^\W\d]\w*(\.[^\W\d]\w*)*")


@dataclass(frozen=True, slots=True)
class Resolved:
    """A learner that was found.

    Parameters
    ----------
    specification : Specification
    method : str
        What tables and keys call it: the built-in name, "FILE.py:NAME" without folders, or
        "package.module:NAME". The same on every machine.
    source : str or None
        Where `load` finds it again: "FILE.py:NAME" with an absolute path, or "package.module:NAME"; None
        for a built-in method.
    digest : str
        Of its code, as hexadecimal; empty for a built-in method, which has a `revision` instead.
    """

    specification: Specification
    method: str
    source: str | None
    digest: str


def resolve(method: str | None, source: str | None, folder: Path) -> Resolved:
    """Find a learner by the name of a built-in method or by its source.

    Parameters
    ----------
    method : str or None
    source : str or None
        One of the two must be given.
    folder : Path
        The place to which the path of a file is relative: the plan's folder.

    Raises
    ------
    InputError
        One line: no such method, file, module or name; not callable; settings that cannot be read; an
        exception while the source was imported, with its line.

    Examples
    --------
    >>> resolve(None, "colours.py", Path("."))
    Traceback (most recent call last):
        ...
    generators.errors.InputError: must be 'FILE.py:NAME' or 'package.module:NAME', got 'colours.py'
    """
    if source is None:
        if method is None:
            raise ValueError("a learner has a method or a source")
        return Resolved(built_in(method), method, None, "")
    place, name = _split(source)
    if not place.endswith(".py"):
        code = _package_digest(place)
        return Resolved(_find(_import_module(place), place, name), source, source, code)
    path = os.path.realpath(os.path.join(folder, place))
    if not os.path.isfile(path):
        raise InputError(f"no such file: {place!r}.{nearest(os.path.basename(path), _python_files(path))}")
    code = _folder_digest(os.path.dirname(path))
    own = os.path.basename(path)
    return Resolved(_find(_import_file(path, code), own, name), f"{own}:{name}", f"{path}:{name}", code)


def load(learner: Learner) -> Specification:
    """Return the specification of a plan's learner, in whichever process asks.

    Raises
    ------
    InputError
        As `resolve` does, and if the code is no longer that of which the plan took the digest.
    """
    if learner.source is None:
        return built_in(learner.method)
    found = resolve(None, learner.source, Path())
    if found.digest != learner.origin_digest:
        raise InputError(f"{learner.method} has changed since the plan was read; start again")
    return found.specification


def needs_isolation(learner: Learner) -> bool:
    """Whether each run of the learner needs a process of its own: true of all but the built-in ones."""
    return learner.source is not None


@contextlib.contextmanager
def own_folder(folder: str | None) -> Iterator[None]:
    """Let imports find the modules of a learner's own folder, within this context only.

    `resolve` and `load` import a file within it; whoever calls a learner does so too, for the sake of
    imports inside its functions. Afterwards the folder's modules are forgotten, so that two
    learners may each have a ``helper.py``.

    Parameters
    ----------
    folder : str or None
        From `folder_of`; nothing happens for None.
    """
    if folder is None:
        yield
        return
    before, no_bytecode = set(sys.modules), sys.dont_write_bytecode
    sys.path.insert(0, folder)
    # Byte code is matched by whole seconds and size: one left here could stand for a file changed since.
    sys.dont_write_bytecode = True
    importlib.invalidate_caches()
    try:
        yield
    finally:
        sys.dont_write_bytecode = no_bytecode
        with contextlib.suppress(ValueError):
            sys.path.remove(folder)
        for name in _lying_in(folder, set(sys.modules) - before):
            del sys.modules[name]


def folder_of(learner: Learner) -> str | None:
    """Return the folder of a learner that is a file, for `own_folder`; None for every other."""
    place = (learner.source or "").rpartition(":")[0]
    return os.path.dirname(place) if place.endswith(".py") else None


def _split(source: str) -> tuple[str, str]:
    place, _, name = source.rpartition(":")
    is_place = place.endswith(".py") or _MODULE.fullmatch(place)
    if not is_place or not name.isidentifier() or "\0" in place:
        raise InputError(f"must be {ACCEPTED}, got {source!r}")
    return place, name


def _find(module: ModuleType, place: str, name: str) -> Specification:
    if not hasattr(module, name):
        functions = [key for key, value in vars(module).items() if inspect.isfunction(value)]
        raise InputError(f"{place} has no {name!r}.{nearest(name, functions)}")
    function = getattr(module, name)
    if not callable(function):
        raise InputError(f"{name!r} in {place} must be a function, got {type(function).__name__}")
    specification = specification_of(function)
    _check_call(specification, place, name)
    return specification


def _check_call(specification: Specification, place: str, name: str) -> None:
    given: dict[str, Any] = dict.fromkeys(specification.settings)
    if specification.takes_rng:
        given["rng"] = None
    if specification.takes_knowledge:
        given["knowledge"] = None
    try:
        inspect.signature(specification.function).bind(None, **given)
    except TypeError as error:
        words = ", ".join(["data", *(f"{key}=..." for key in given)])
        raise InputError(f"{name!r} in {place} cannot be called as {name}({words}): {error}") from None


def _import_file(path: str, code: str) -> ModuleType:
    """Run a file as a module under a private name, once for each digest of its folder."""
    name = f"_arcassay_learner_{digest('learner file', [path, code]).hex()}"
    if name in sys.modules:
        return sys.modules[name]
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise InputError(f"{path} cannot be imported")
    module = importlib.util.module_from_spec(spec)
    folder = os.path.dirname(path)
    with own_folder(folder), _faults_as_input_errors([folder], folder, os.path.basename(path)):
        sys.modules[name] = module  # dataclasses and the like look their module up while it is imported
        try:
            spec.loader.exec_module(module)
        except BaseException:
            del sys.modules[name]
            raise
    return module


def _import_module(name: str) -> ModuleType:
    own = _locations(importlib.util.find_spec(name.partition(".")[0]))
    with _faults_as_input_errors(own, os.path.dirname(own[0]), name):
        return importlib.import_module(name)


@contextlib.contextmanager
def _faults_as_input_errors(own: list[str], root: str, place: str) -> Iterator[None]:
    """Turn whatever a stranger's code raises while it is imported into one line with file and line.

    The line is the last one below the places in `own`, its file relative to `root`. What the code prints
    goes to standard error: standard output belongs to the command that is running.
    """
    try:
        with contextlib.redirect_stdout(sys.stderr):
            yield
    except KeyboardInterrupt:
        raise
    except BaseException as error:  # SystemExit too: a script may end itself when it is imported
        text = " ".join(str(error).split())[:LONGEST_MESSAGE]
        kind = "" if isinstance(error, InputError) else f"{type(error).__name__} while importing: "
        raise InputError(f"{_line_of(error, own, root) or place}: {kind}{text}") from None


def _line_of(error: BaseException, own: list[str], root: str) -> str:
    lines = [(frame.filename, frame.lineno) for frame in traceback.extract_tb(error.__traceback__)]
    if isinstance(error, SyntaxError) and error.filename:
        lines.append((error.filename, error.lineno))
    folders = tuple(os.path.join(place, "") for place in own)
    below = [(file, line) for file, line in lines if file in own or file.startswith(folders)]
    return f"{os.path.relpath(below[-1][0], root)}:{below[-1][1]}" if below else ""


def _lying_in(folder: str, names: set[str]) -> list[str]:
    """Return those of some modules whose top-level module is among them and lies directly in `folder`.

    A package that was there before keeps its new submodules: half of a package would be worse than none.
    """
    tops = set()
    for name in names:
        module = sys.modules.get(name)
        if "." in name or module is None:
            continue
        path = getattr(module, "__path__", None)
        place = next(iter(path), None) if path is not None else getattr(module, "__file__", None)
        if (
            place is not None
            and os.path.dirname(place) == folder
            and not name.startswith("_arcassay_learner_")
        ):
            tops.add(name)
    return [name for name in names if name.partition(".")[0] in tops]


def _python_files(path: str) -> list[str]:
    with contextlib.suppress(OSError):
        return [name for name in os.listdir(os.path.dirname(path)) if name.endswith(".py")]
    return []


def _folder_digest(folder: str) -> str:
    files = []
    for own, subfolders, names in os.walk(folder):
        subfolders[:] = [sub for sub in subfolders if os.path.isfile(os.path.join(own, sub, "__init__.py"))]
        paths = [os.path.join(own, name) for name in names if name.endswith(".py") and name[0] != "."]
        files += [path for path in paths if os.path.isfile(path)]
    return _digest_of(folder, files)


def _package_digest(module: str) -> str:
    top = module.partition(".")[0]
    try:
        spec = importlib.util.find_spec(top)
    except (ImportError, ValueError):
        spec = None
    if spec is None:
        raise InputError(f"no module named {top!r} is installed")
    locations = _locations(spec)
    if not locations:
        raise InputError(f"the module {top!r} has no file of which a digest could be taken")
    files = []
    for location in locations:
        for own, subfolders, names in os.walk(location):
            subfolders[:] = [sub for sub in subfolders if sub != "__pycache__"]
            files += [os.path.join(own, name) for name in names if not name.endswith(".pyc")]
        if os.path.isfile(location):
            files.append(location)
    return _digest_of(os.path.dirname(locations[0]), [path for path in files if os.path.isfile(path)])


def _locations(spec: Any) -> list[str]:
    """Return the folders of a package, or the file of a module."""
    if spec.submodule_search_locations is not None:
        return list(spec.submodule_search_locations)
    return [spec.origin] if spec.has_location and spec.origin else []


def _digest_of(root: str, files: list[str]) -> str:
    try:
        contents = {
            Path(os.path.relpath(path, root)).as_posix(): hashlib.sha256(Path(path).read_bytes()).hexdigest()
            for path in files
        }
    except OSError as error:
        raise InputError(f"{error.filename} cannot be read: {error.strerror}") from None
    return digest("learner code", contents).hex()
