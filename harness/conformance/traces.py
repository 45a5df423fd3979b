"""Checks of a call in a process of its own: it keeps to its limits and leaves nothing behind."""

from __future__ import annotations

from harness.conformance.inputs import from_network, many_variables
from harness.conformance.isolation import GRACE_SECONDS, TELLS_THREADS, Observed, observe
from harness.conformance.results import Failed, LearnerCall, Skipped
from harness.conformance.subject import Subject, answer_to
from harness.records import Limits, Status

TIGHT = Limits(seconds=0.5)
LARGE_ROWS = 2000
# One look may see a thread hand over to another, on a busy machine some may; shared work shows in many.
LEAST_LOOKS = 10
LEAST_SHARE = 0.2


def check_time_limit(subject: Subject) -> None:
    """At a limit of half a second it has ended or ends when asked to, with all that it started."""
    for asked in _small_and_large(subject):
        seen = _observed(subject, asked, TIGHT)
        if seen.is_deaf:
            raise Failed(f"it went on for {GRACE_SECONDS:g} s after it had been asked to end", asked)
        if seen.survivors:
            raise Failed(f"what it had started went on after its end: {', '.join(seen.survivors)}", asked)
        _skip_if_declined(seen)


def check_declared_threads(subject: Subject) -> None:
    """No more threads are at work at a time than the learner declares."""
    if not TELLS_THREADS:
        raise Skipped("this system does not tell which threads are at work")
    declared = subject.specification.threads
    for asked in _small_and_large(subject):
        seen = _observed(subject, asked, TIGHT)
        n_over = sum(n > declared for n in seen.n_running)
        if n_over >= max(LEAST_LOOKS, LEAST_SHARE * len(seen.n_running)):
            most = max(seen.n_running)
            raise Failed(f"it declares threads = {declared}, but {most} were at work at a time", asked)
        _skip_if_declined(seen)


def check_nothing_left(subject: Subject) -> None:
    """No process, file or output is left behind, and nothing of the process's surroundings is changed."""
    # What a first call imports may have something to say, or keep: the second is judged.
    asked = _small(subject)
    seen = _observed(subject, asked, Limits(), is_rehearsed=True)
    left = {
        "it left processes": seen.survivors,
        "it left files": seen.files,
        "it changed what is not its own": seen.changed,
        "it wrote to standard output or error": seen.output.splitlines()[:1],
    }
    for what, details in left.items():
        if details:
            raise Failed(f"{what}: {', '.join(details)}", asked)
    if seen.is_deaf:
        raise Failed("its process did not end after the call", asked)
    _skip_if_declined(seen)
    if seen.status is Status.TIMEOUT:
        raise Skipped(seen.cause)


def _small(subject: Subject) -> LearnerCall:
    return subject.asked(from_network(4, 200, seed=4))


def _small_and_large(subject: Subject) -> list[LearnerCall]:
    return [_small(subject), subject.asked(many_variables(LARGE_ROWS))]


def _observed(
    subject: Subject, asked: LearnerCall, limits: Limits, *, is_rehearsed: bool = False
) -> Observed:
    """Return what was seen of a call that ended as a call may: well, declined, or at its limit."""

    def job() -> None:
        answer_to(subject, asked)

    seen = observe(job, limits=limits, rehearsal=job if is_rehearsed else None)
    if seen.status not in (Status.DONE, Status.DECLINED, Status.TIMEOUT):
        raise Failed(seen.cause, asked)
    return seen


def _skip_if_declined(seen: Observed) -> None:
    if seen.status is Status.DECLINED:
        raise Skipped(f"it declined: {seen.cause}")
