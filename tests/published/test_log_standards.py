"""The standards under the log, RFC 8785 and RFC 6962, against published values."""

import hashlib

import pytest
import rfc8785
from stackbound.log import canonical, tree_root

# The eight entries of the reference tree of RFC 6962 implementations (from memory; every value was recomputed from the
# definitions of section 2.1 for this test).
HEX = ["", "00", "10", "2021", "3031", "40414243", "5051525354555657", "606162636465666768696a6b6c6d6e6f"]
LEAVES = [bytes.fromhex(text) for text in HEX]
ROOTS = [
    "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
    "fac54203e7cc696cf0dfcb42c92a1d9dbaf70ad9e621f4bd8d98662f00e3c125",
    "aeb6bcfe274b70a14fb067a5e5578264db0fa9b51af5e0ba159158f329e06e77",
    "d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7",
    "4e3bbb1f7b478dcfe71fb631631519a3bca12c9aefca1612bfce4c13a86264d4",
    "76e67dadbcdf1e10e1b74ddc608abd2f98dfb16fbce75277b5232a127f2087ef",
    "ddb89be403809e325750d3d263cd78929c2942b7942a34b77e122c9594a74c8c",
    "5dc9da79a70659a9ad559cb701ded9a2ab9d823aad2f4960cfe370eff4604328",
]


@pytest.mark.parametrize("count", range(1, 9))
def test_tree_root(count):
    """The tree root is the Merkle tree hash of RFC 6962 section 2.1."""
    assert ROOTS[count - 1] == tree_root(LEAVES[:count])


def test_empty_tree():
    """The hash of an empty list is that of the empty string (RFC 6962 section 2.1)."""
    assert hashlib.sha256(b"").hexdigest() == tree_root([])


def recursive(leaves):
    """Return the tree hash by the definition of RFC 6962 section 2.1, word by word."""
    if len(leaves) == 1:
        return hashlib.sha256(b"\x00" + leaves[0]).digest()
    k = 1
    while 2 * k < len(leaves):
        k *= 2
    return hashlib.sha256(b"\x01" + recursive(leaves[:k]) + recursive(leaves[k:])).digest()


def test_tree_root_equals_the_recursive_definition():
    """Pairing level by level builds the tree of the recursive definition for every length."""
    for count in range(1, 70):
        leaves = [bytes([n]) * n for n in range(count)]

        assert recursive(leaves).hex() == tree_root(leaves)


def test_canonical_sample():
    """The sample of RFC 8785 section 3.2.2 gives its published bytes (the log itself holds no floats)."""
    sample = {
        "numbers": [333333333.33333329, 1e30, 4.50, 2e-3, 0.000000000000000000000000001],
        "string": "\u20ac$\u000f\u000aA'\u0042\u0022\u005c\\\"\u002f",
        "literals": [None, True, False],
    }
    data = rfc8785.dumps(sample)

    assert 118 == len(data)
    assert "2d5e01a318d0f0879ab568c4be289c8b1f64ef8921a53c6277d5e069978baacb" == hashlib.sha256(data).hexdigest()


def test_canonical_key_order():
    """Keys are sorted by UTF-16 code units (RFC 8785 section 3.2.3)."""
    keys = ["\u20ac", "\r", "\ufb33", "1", "\U0001f600", "\x80", "\u00f6"]
    data = canonical(dict.fromkeys(keys, 0)).decode("utf-8")
    ordered = ["\\r", "1", "\x80", "\u00f6", "\u20ac", "\U0001f600", "\ufb33"]

    assert sorted(map(data.index, ordered)) == list(map(data.index, ordered))
