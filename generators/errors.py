"""The one exception for input that a person got wrong."""

from __future__ import annotations


class InputError(ValueError):
    """Say what is wrong with an input, where, and what is accepted instead.

    The message is one line, or one line per fault when several were found at once. The command line
    prints it without a traceback and ends with exit code 2.

    Parameters
    ----------
    *faults : str
        One complete line each: place, what was found, what is accepted.

    Examples
    --------
    >>> str(InputError("plan.toml: seed: must be a whole number, got 'x'."))
    "plan.toml: seed: must be a whole number, got 'x'."
    """

    def __init__(self, *faults: str) -> None:
        super().__init__("\n".join(faults))
        self.faults = faults
