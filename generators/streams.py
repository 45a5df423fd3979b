"""Identity and randomness: every key is a digest, every random stream is a function of a key.

Two things with the same recipe have the same key on every machine, and what is drawn for one thing
never depends on what else is drawn, in which order, or by how many workers.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from typing import Any

import numpy as np

KEY_BYTES = 16


def canonical_json(value: Any) -> str:
    r"""Return the one JSON text that stands for `value` in a digest.

    Keys are sorted, no white space, non-ASCII escaped, floats by `repr` (so 2 and 2.0 differ: settings
    are brought to their declared type before they come here), bytes as hexadecimal.

    Raises
    ------
    TypeError
        For values that JSON cannot hold.
    ValueError
        For NaN and infinities.

    Examples
    --------
    >>> canonical_json({"b": 1.0, "a": [True, None, b"\x0f"]})
    '{"a":[true,null,"0f"],"b":1.0}'
    """
    return json.dumps(
        value, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False, default=_encode
    )


def _encode(value: Any) -> Any:
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, Mapping):
        return dict(value)
    if isinstance(value, np.generic):
        return value.item()
    raise TypeError(f"cannot put a {type(value).__name__} into a key")


def digest(kind: str, fields: Any) -> bytes:
    """Return the 16-byte key of `fields`, a thing of sort `kind`.

    Parameters
    ----------
    kind : str
        What the fields describe, so that a network and a dataset never share a key by accident.
    fields : JSON-like
        The recipe, defaults left out, values in their declared types.

    Returns
    -------
    bytes
        The first 16 bytes of the SHA-256 of ``canonical_json([kind, fields])``.

    Examples
    --------
    >>> digest("network", {"seed": 1}).hex()
    '03eb8bf35f731dc5cb09daeda6582931'
    """
    return hashlib.sha256(canonical_json([kind, fields]).encode("ascii")).digest()[:KEY_BYTES]


def stream(purpose: str, key: bytes) -> np.random.Generator:
    """Return the random generator that serves one purpose of the thing with this key.

    Parameters
    ----------
    purpose : str
        What is drawn ("graph", "cpts", "view", "learner", ...); each purpose has its own stream, so a
        change in how one thing is drawn leaves the others alone.
    key : bytes
        A 16-byte key from `digest`.

    Returns
    -------
    numpy.random.Generator
        PCG64 seeded by ``SeedSequence`` over the words of the key and of the purpose's SHA-256.

    Examples
    --------
    >>> key = digest("network", {"seed": 1})
    >>> bool(stream("graph", key).random() == stream("graph", key).random())
    True
    >>> bool(stream("graph", key).random() == stream("cpts", key).random())
    False
    """
    if len(key) != KEY_BYTES:
        raise ValueError(f"a key has {KEY_BYTES} bytes, got {len(key)}")
    purpose_words = np.frombuffer(hashlib.sha256(purpose.encode()).digest()[:KEY_BYTES], dtype="<u4")
    words = np.concatenate([np.frombuffer(key, dtype="<u4"), purpose_words])
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence([int(word) for word in words])))
