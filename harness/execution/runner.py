"""The forked process in which learners are called.

It talks to its supervisor over one connection: commands come in as Python objects of ours, answers go
back as JSON, since in a one-run process a stranger's code shares the memory.
"""

from __future__ import annotations

import contextlib
import os
import resource
import signal
import sys
import traceback
from collections.abc import Callable, Mapping
from multiprocessing.connection import Connection
from pathlib import Path
from typing import Any

from generators.errors import InputError
from generators.streams import canonical_json
from harness.execution.memory import MEBIBYTE
from harness.execution.messages import Request, Work, outcome_fields
from harness.execution.one_run import (
    Material,
    MaterialSource,
    compile_for_wide_codes,
    failed,
    scored,
    timed_call,
    timed_fields,
)
from harness.execution.processes import die_with_parent
from harness.learners.sources import folder_of, load, own_folder
from harness.learners.specification import Specification
from harness.ledger.store import edge_positions
from harness.records import Learner, Outcome

_CONNECTION_FILE = 3
_MANY_FILES = 1 << 16  # where their number is not limited
ADDRESS_SPACE_SLACK_MB = 8192  # address space is not memory: numba and the BLAS reserve gigabytes


def fork_runner(main: Callable[[Connection], None], connection: Connection, output: int, folder: Path) -> int:
    """Fork a runner in a session of its own and return its process number.

    Parameters
    ----------
    main : callable
        Takes the connection; the process ends when it returns.
    connection : Connection
        The runner's end.
    output : int
        An open file that takes standard output and error.
    folder : Path
        The working folder, so that relative files stay there.
    """
    parent = os.getpid()
    pid = os.fork()
    if pid:
        return pid
    code = 1
    try:
        os.setsid()
        die_with_parent(parent)
        signal.signal(signal.SIGTERM, signal.SIG_DFL)
        signal.signal(signal.SIGINT, signal.SIG_IGN)
        os.chdir(folder)
        _offer_itself_first()
        _keep_only(connection.fileno(), output)
        main(Connection(_CONNECTION_FILE))
        code = 0
    except (EOFError, BrokenPipeError, ConnectionResetError):
        code = 0  # the supervisor is gone, and so is the reason to be
    except BaseException:
        with contextlib.suppress(BaseException):
            traceback.print_exc()
    finally:
        # Whatever a learner has made of the streams: nothing may return from here into the supervisor.
        for stream in (sys.stdout, sys.stderr):
            with contextlib.suppress(BaseException):
                stream.flush()
        os._exit(code)
    raise AssertionError("not reached")


def serve_many(
    learners: tuple[Learner, ...], specifications: Mapping[int, Specification]
) -> Callable[[Connection], None]:
    """Return the main function of a runner that takes run after run of built-in learners."""

    def main(connection: Connection) -> None:
        source = MaterialSource()
        material: Material | None = None
        while True:
            command, *arguments = connection.recv()
            if command == "draw":
                material = _draw(connection, source, arguments[0], specifications)
                continue
            assert material is not None
            for request in material.work.requests[slice(*arguments)]:
                outcome = _outcome_of(
                    specifications[request.learner], learners[request.learner], material, request
                )
                _send(connection, event="outcome", **outcome_fields(outcome))

    return main


def serve_one(learner: Learner, material: Material, position: int) -> Callable[[Connection], None]:
    """Return the main function of a runner that calls somebody's learner once."""

    def main(connection: Connection) -> None:
        _bound_address_space(learner.limits.memory_mb)
        try:
            with own_folder(folder_of(learner)):
                specification = load(learner)
                _send(connection, event="calling")
                timed = timed_call(specification, material, material.work.requests[position])
        except BaseException as error:
            # A learner's way of ending is a status, whatever it is.
            _send(connection, event="outcome", **outcome_fields(failed(error)))
        else:
            _send(connection, event="learned", **timed_fields(timed))

    return main


def _outcome_of(
    specification: Specification, learner: Learner, material: Material, request: Request
) -> Outcome:
    try:
        timed = timed_call(specification, material, request)
    except Exception as error:
        return failed(error)
    return scored(material, learner, timed)


def _draw(
    connection: Connection, source: MaterialSource, work: Work, specifications: Mapping[int, Specification]
) -> Material | None:
    try:
        material = source.draw(work)
    except InputError as error:
        _send(connection, event="cannot-draw", message=str(error))
        return None
    for request in {request.learner: request for request in work.requests}.values():
        if request.learner in specifications:
            compile_for_wide_codes(specifications[request.learner], material, request)
    network, dataset = material.drawn_network, material.drawn_dataset
    _send(
        connection,
        event="drawn",
        names=network.graph.names,
        edges=edge_positions(network.graph),
        cpts_digest=network.cpts_digest,
        view_digest=dataset.view_digest,
        distortions=dataset.distortions,
    )
    return material


def _send(connection: Connection, **fields: Any) -> None:
    connection.send_bytes(canonical_json(fields).encode("ascii"))


def _offer_itself_first() -> None:
    """When memory runs out, the system is to end this process, not those that watch and write."""
    with contextlib.suppress(OSError), open("/proc/self/oom_score_adj", "w") as file:
        file.write("1000")
    with contextlib.suppress(OSError, ValueError):  # and a crash is to leave no image of the memory behind
        resource.setrlimit(resource.RLIMIT_CORE, (0, resource.getrlimit(resource.RLIMIT_CORE)[1]))


def _keep_only(connection: int, output: int) -> None:
    # The supervisor's other files must not stay open here: their ends would never be seen to close.
    nothing = os.open(os.devnull, os.O_RDONLY)
    os.dup2(nothing, 0)
    os.dup2(output, 1)
    os.dup2(output, 2)
    os.dup2(connection, _CONNECTION_FILE, inheritable=False)
    limit = resource.getrlimit(resource.RLIMIT_NOFILE)[0]
    os.closerange(_CONNECTION_FILE + 1, limit if limit > 0 else _MANY_FILES)


def _bound_address_space(memory_mb: int) -> None:
    limit = (memory_mb * 4 + ADDRESS_SPACE_SLACK_MB) * MEBIBYTE
    _, hard = resource.getrlimit(resource.RLIMIT_AS)
    resource.setrlimit(resource.RLIMIT_AS, (limit if hard < 0 else min(limit, hard), hard))
