"""Keys and random streams: the same on every machine, and independent of each other."""

from __future__ import annotations

import hashlib

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from generators.streams import canonical_json, digest, stream

KEY = bytes(range(16))
PLAIN = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=8,
)


@pytest.mark.parametrize(
    ("kind", "fields", "expected"),
    [
        # Printed by the command sha256sum for the bytes of the JSON text: an outside implementation.
        ("network", {"seed": 1}, "03eb8bf35f731dc5cb09daeda6582931"),
        ("dataset", {"network": KEY, "index": 0}, "0cc7c0ee53ed54b016ab210baabf2b6b"),
    ],
)
def test_digest_is_frozen(kind: str, fields: object, expected: str) -> None:
    """A key is the first 16 bytes of the SHA-256 of the recipe's JSON text, today and for ever."""
    assert expected == digest(kind, fields).hex()


def test_digest_hashes_the_text_written_by_hand() -> None:
    """The text that is hashed is the one a person would write by the rules."""
    text = '["learner",{"alpha":0.05,"name":"\\u00e9","score":null}]'
    expected = hashlib.sha256(text.encode("ascii")).digest()[:16]

    assert expected == digest("learner", {"score": None, "name": "é", "alpha": 0.05})


@given(PLAIN)
def test_key_order_does_not_matter(value: object) -> None:
    """Mappings with the same entries in another order have the same text."""

    def turned(part: object) -> object:
        if isinstance(part, dict):
            return {key: turned(part[key]) for key in reversed(part)}
        return [turned(each) for each in part] if isinstance(part, list) else part

    assert canonical_json(value) == canonical_json(turned(value))


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ({"rows": 2}, {"rows": 2.0}),
        ({"rows": 2}, {"rows": "2"}),
        ({"a": None}, {}),
        ([1, 2], [2, 1]),
        (True, 1),
    ],
)
def test_different_recipes_have_different_keys(one: object, other: object) -> None:
    """Type, order of a list, and presence of a key are part of a recipe."""
    assert digest("thing", one) != digest("thing", other)


def test_the_kind_is_part_of_the_key() -> None:
    """A network and a dataset with the same fields have different keys."""
    assert digest("network", {"index": 1}) != digest("dataset", {"index": 1})


def test_numpy_scalars_stand_for_their_values() -> None:
    """A number drawn by numpy gives the key of the same Python number."""
    assert canonical_json([1, 0.5, True]) == canonical_json([np.int64(1), np.float64(0.5), np.bool_(True)])


@pytest.mark.parametrize("value", [float("nan"), float("inf"), {"x": float("-inf")}])
def test_a_key_holds_no_infinite_number(value: object) -> None:
    """NaN and infinities have no JSON text and are refused."""
    with pytest.raises(ValueError, match="JSON"):
        canonical_json(value)


@pytest.mark.parametrize("value", [{1, 2}, object(), np.zeros(2)])
def test_a_key_holds_only_json(value: object) -> None:
    """What JSON cannot hold is refused instead of hashed by its repr."""
    with pytest.raises(TypeError, match="cannot put a"):
        canonical_json(value)


@pytest.mark.parametrize(
    ("purpose", "key", "expected"),
    [
        ("graph", bytes(16), [14224886163530518172, 4404937177191491028]),
        ("cpts", KEY, [13516161229887026899, 17600939144432457565]),
    ],
)
def test_stream_is_frozen(purpose: str, key: bytes, expected: list[int]) -> None:
    """The words of a stream never change: stored networks are redrawn from them."""
    words = stream(purpose, key).bit_generator.random_raw(2)

    assert expected == words.tolist()


def test_a_stream_can_be_rebuilt_with_numpy_alone() -> None:
    """A stream is PCG64 seeded by the eight 32-bit words of the key and of the purpose's SHA-256."""
    seed = [int.from_bytes(KEY[i : i + 4], "little") for i in range(0, 16, 4)]
    hashed = hashlib.sha256(b"view").digest()
    seed += [int.from_bytes(hashed[i : i + 4], "little") for i in range(0, 16, 4)]
    expected = np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed))).random(5)

    assert expected.tolist() == stream("view", KEY).random(5).tolist()


def test_streams_of_one_thing_are_independent() -> None:
    """Neither purposes of one key nor neighbouring keys are correlated.

    Of 4,000 keys the first number for two purposes, and that of the next key: each correlation is
    normal with standard deviation 1/sqrt(4000), so |z| > 5.5 has probability 4e-8.
    """
    keys = [digest("replicate", i) for i in range(4001)]
    graph = np.array([stream("graph", key).random() for key in keys])
    cpts = np.array([stream("cpts", key).random() for key in keys])

    z_purposes = np.corrcoef(graph[:-1], cpts[:-1])[0, 1] * np.sqrt(4000)
    z_neighbours = np.corrcoef(graph[:-1], graph[1:])[0, 1] * np.sqrt(4000)
    z_mean = (graph.mean() - 0.5) * np.sqrt(12 * 4001)

    assert abs(z_purposes) < 5.5
    assert abs(z_neighbours) < 5.5
    assert abs(z_mean) < 5.5


@pytest.mark.parametrize("length", [0, 15, 17])
def test_a_key_has_sixteen_bytes(length: int) -> None:
    """A key of another length is a program bug and is not padded."""
    with pytest.raises(ValueError, match="16 bytes"):
        stream("graph", bytes(length))
