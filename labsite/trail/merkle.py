"""The Merkle tree hash of RFC 9162, section 2.1.1. Pure: bytes in, bytes out.

A leaf and an inner node are hashed under different prefixes, so that neither can be passed off as the other.
"""

from __future__ import annotations

from hashlib import sha256

LEAF_PREFIX = b"\x00"
NODE_PREFIX = b"\x01"


def leaf_hash(data: bytes) -> bytes:
    """SHA-256(0x00 || data), 32 bytes."""
    return sha256(LEAF_PREFIX + data).digest()


def node_hash(left: bytes, right: bytes) -> bytes:
    """SHA-256(0x01 || left || right), 32 bytes."""
    return sha256(NODE_PREFIX + left + right).digest()


class TreeRoot:
    """Folds leaf hashes, given in order, into the root of the tree over them; keeps at most 64 hashes.

    Each pending subtree is perfect and smaller than the one before it, which is the split of RFC 9162 (largest
    power of two below n on the left) read from the left.
    """

    def __init__(self) -> None:
        self.size = 0
        self._subtrees: list[tuple[int, bytes]] = []  # (number of leaves, root), sizes falling

    def add(self, leaf: bytes) -> None:
        """Append the leaf hash `leaf` (32 bytes)."""
        leaves, root = 1, leaf
        while self._subtrees and self._subtrees[-1][0] == leaves:
            _, left = self._subtrees.pop()
            leaves, root = 2 * leaves, node_hash(left, root)
        self._subtrees.append((leaves, root))
        self.size += 1

    def root(self) -> bytes:
        """The root over all leaves so far; SHA-256 of nothing for the empty tree."""
        if not self._subtrees:
            return sha256(b"").digest()
        *rest, (_, root) = self._subtrees
        for _, left in reversed(rest):
            root = node_hash(left, root)
        return root
