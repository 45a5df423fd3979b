"""The one decorator for compiled kernels.

numba caches machine code per file and does not notice when a kernel that was inlined from *another*
file has changed; and it fails to import where its cache folder cannot be written. So every kernel here
shares one cache folder, named by a digest of all kernel sources, the numba version and the processor;
where nothing is writable, kernels are compiled in memory.
"""

from __future__ import annotations

import contextlib
import fcntl
import functools
import hashlib
import os
import platform
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import numba
from numba.core import config

# numba's options live in a module whose attributes are made at run time.
numba_config: Any = config
Kernel = TypeVar("Kernel", bound=Callable[..., Any])

CACHE_VARIABLE = "ARCASSAY_CACHE"
_PACKAGES = ("generators", "harness")
_READY = "ready"
_warm_ups: list[Callable[[], None]] = []


def kernel(function: Kernel) -> Kernel:
    """Compile a function on first use, cached on disk where that is possible.

    Compiled without bounds checks and without holding the interpreter lock. Floating point is strict
    (no reordering), so sums are the same on every machine of a kind. Division by zero gives what IEEE
    754 says.

    Parameters
    ----------
    function : callable
        A function in numba's nopython subset.

    Returns
    -------
    callable
        The compiled function; `.py_func` is the plain one.
    """
    folder = cache_folder()
    previous = numba_config.CACHE_DIR
    if folder is not None:
        # numba reads the folder once, when caching is switched on for the function.
        numba_config.CACHE_DIR = str(folder)
    try:
        return numba.njit(function, cache=folder is not None, nogil=True, error_model="numpy")  # type: ignore[no-any-return]
    finally:
        numba_config.CACHE_DIR = previous


def inlined(function: Kernel) -> Kernel:
    """Compile a small function that is only called from kernels; it is never cached by itself."""
    # No wrappers to call it from Python or C: a sixth of the compilation.
    return numba.njit(  # type: ignore[call-overload, no-any-return]
        function, nogil=True, error_model="numpy", no_cpython_wrapper=True, no_cfunc_wrapper=True
    )


def warm_up(function: Callable[[], None]) -> Callable[[], None]:
    """Register a function that runs a module's kernels once on tiny input, so that all are compiled.

    On codes of one byte: what has more than 255 states is compiled when it is first met.
    """
    _warm_ups.append(function)
    return function


def warm_all() -> None:
    """Run every registered warm-up, and note that this cache is complete.

    Several processes may do so at the same time: each leaves to the others what they are at, and comes
    back to find it in the cache.
    """
    folder = cache_folder()
    left_to_others = [function for function in _warm_ups if not _run_alone(function, folder, waits=False)]
    for function in left_to_others:
        _run_alone(function, folder, waits=True)
    if folder is not None:
        (folder / _READY).touch()


def _run_alone(function: Callable[[], None], folder: Path | None, *, waits: bool) -> bool:
    """Run a warm-up while no other process runs it; without waiting, say whether it was run."""
    if folder is None:
        function()
        return True
    with (folder / f"{function.__module__}.lock").open("w") as file:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | (0 if waits else fcntl.LOCK_NB))
        except BlockingIOError:
            return False
        except OSError:  # a file system without locks: compiled twice, at worst
            pass
        function()
    return True


def is_warm() -> bool:
    """Whether an earlier process filled the cache for exactly these sources."""
    folder = cache_folder()
    return folder is not None and (folder / _READY).exists()


@functools.cache
def cache_folder() -> Path | None:
    """Return the folder of the compiled kernels, made if needed, or None where none is writable."""
    name = f"arcassay-kernels-{_sources_digest()}"
    for parent in _candidates():
        folder = parent / name
        try:
            folder.mkdir(parents=True, exist_ok=True)
            with tempfile.NamedTemporaryFile(dir=folder):
                return folder
        except OSError:
            continue
    return None


def _candidates() -> list[Path]:
    chosen = os.environ.get(CACHE_VARIABLE)
    if chosen:
        return [Path(chosen)]
    home_cache = os.environ.get("XDG_CACHE_HOME")
    candidates = [Path(home_cache)] if home_cache else []
    with contextlib.suppress(RuntimeError):  # no home folder is known
        candidates.append(Path.home() / ".cache")
    return candidates


@functools.cache
def _sources_digest() -> str:
    root = Path(__file__).parent.parent
    hasher = hashlib.sha256()
    for package in _PACKAGES:
        for file in sorted((root / package).rglob("*.py")):
            text = file.read_bytes()
            if b"compiled import" in text:
                hasher.update(file.relative_to(root).as_posix().encode() + b"\0" + text)
    # The place counts too: numba files machine code under the path of its source.
    parts = (str(root), numba.__version__, numba_config.CPU_NAME or "", platform.machine(), _processor())
    hasher.update("\0".join(map(str, parts)).encode())
    return hasher.hexdigest()[:16]


def _processor() -> str:
    import llvmlite.binding as llvm

    return f"{llvm.get_host_cpu_name()} {llvm.get_host_cpu_features().flatten()}"
