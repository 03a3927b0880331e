"""The pure parts against published values.

Sources: RFC 9162 section 2.1.1 with the leaves of its authors' published test data; RFC 8785 section 3.2.2 (the sample
object), section 3.2.3 (key order) and appendix B (numbers).
"""

from __future__ import annotations

import json
import struct
from hashlib import sha256

import pytest

from labsite.trail import canonical, chain, merkle

LEAVES = [bytes.fromhex(leaf) for leaf in ("", "00", "10", "2021", "3031", "40414243", "5051525354555657")]
LEAVES.append(bytes(range(0x60, 0x70)))
ROOTS = [
    "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855",
    "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
    "fac54203e7cc696cf0dfcb42c92a1d9dbaf70ad9e621f4bd8d98662f00e3c125",
    "aeb6bcfe274b70a14fb067a5e5578264db0fa9b51af5e0ba159158f329e06e77",
    "d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7",
    "4e3bbb1f7b478dcfe71fb631631519a3bca12c9aefca1612bfce4c13a86264d4",
    "76e67dadbcdf1e10e1b74ddc608abd2f98dfb16fbce75277b5232a127f2087ef",
    "ddb89be403809e325750d3d263cd78929c2942b7942a34b77e122c9594a74c8c",
    "5dc9da79a70659a9ad559cb701ded9a2ab9d823aad2f4960cfe370eff4604328",
]


def root_of(leaves: list[bytes]) -> str:
    tree = merkle.TreeRoot()
    for leaf in leaves:
        tree.add(merkle.leaf_hash(leaf))
    return tree.root().hex()


@pytest.mark.parametrize("size", range(9))
def test_the_root_over_the_first_leaves_is_the_published_one(size):
    assert root_of(LEAVES[:size]) == ROOTS[size]


def test_roots_of_short_texts():
    assert merkle.leaf_hash(b"a").hex() == "022a6979e6dab7aa5ae4c3e5e45f7e977112a7e63593820dbec1ec738a24f93c"
    assert root_of([b"a", b"b"]) == "b137985ff484fb600db93107c77b0365c80d78f5b429ded0fd97361d077999eb"
    assert root_of([b"a", b"b", b"c"]) == "36642e73c2540ab121e3a6bf9545b0a24982cd830eb13d3cd19de3ce6c021ec1"


def test_hashing_without_prefixes_gives_another_root():
    unprefixed = sha256(sha256(b"a").digest() + sha256(b"b").digest()).hexdigest()
    assert root_of([b"a", b"b"]) != unprefixed


def test_an_entry_hash_is_a_leaf_hash():
    assert chain.entry_hash(b"a") == merkle.leaf_hash(b"a").hex()


def test_the_sample_object_has_the_published_bytes():
    sample = json.loads(
        r'{"numbers":[333333333.33333329,1E30,4.50,2e-3,0.000000000000000000000000001],'
        r'"string":"\u20ac$\u000F\u000aA\'\u0042\u0022\u005c\\\"\/","literals":[null,true,false]}'.replace(r"\'", "'")
    )
    stored = canonical.canonical_bytes(sample)
    assert len(stored) == 118
    assert sha256(stored).hexdigest() == "2d5e01a318d0f0879ab568c4be289c8b1f64ef8921a53c6277d5e069978baacb"


@pytest.mark.parametrize(
    ("pattern", "text"),
    [
        ("0000000000000000", "0"),
        ("8000000000000000", "0"),
        ("0000000000000001", "5e-324"),
        ("7fefffffffffffff", "1.7976931348623157e+308"),
        ("4340000000000000", "9007199254740992"),
        ("44b52d02c7e14af6", "1e+23"),
        ("444b1ae4d6e2ef50", "1e+21"),
        ("3eb0c6f7a0b5ed8d", "0.000001"),
        ("41b3de4355555555", "333333333.3333333"),
        ("becbf647612f3696", "-0.0000033333333333333333"),
        ("43143ff3c1cb0959", "1424953923781206.2"),
    ],
)
def test_numbers_are_written_as_published(pattern, text):
    (number,) = struct.unpack(">d", bytes.fromhex(pattern))
    assert canonical.canonical_bytes(number).decode() == text


def test_keys_are_ordered_by_their_utf16_units():
    names = ["\u20ac", "\r", "\ufb33", "1", "\U0001f600", "\u0080", "\u00f6"]
    stored = json.loads(canonical.canonical_bytes(dict.fromkeys(names, 0)))
    assert list(stored) == ["\r", "1", "\u0080", "\u00f6", "\u20ac", "\U0001f600", "\ufb33"]


def test_a_small_record_has_its_known_hash():
    record = json.loads('{"y":[0.10,1E-7],"id":"S-001","nu":[4000.0,3998.071]}')
    expected = "ae1aedfab78e295d9f81f3cbd11c5933708d041ddcd719601e395110e26b8a2c"
    assert sha256(canonical.canonical_bytes(record)).hexdigest() == expected
