"""The Merkle tree of RFC 9162, section 2.1: roots, inclusion and consistency proofs from stored subtree hashes.

Hashes. A leaf is SHA-256(0x00 || entry), a node SHA-256(0x01 || left || right), the empty tree SHA-256 of nothing.
The tree over the leaves [lo, hi) splits after the largest power of two smaller than hi - lo.

Storage. The hash (level, index) covers the 2^level leaves from index * 2^level on; it never changes once these
leaves exist. `append_nodes` says which hashes a new leaf completes; all else is computed from stored hashes that
`read_hashes` fetches, asked once per operation for at most 64 * 64 hashes (log-squared in the size of the tree).

Shape of the proofs. `_inclusion_path` and `_consistency_path` list the ranges of leaves beside the way from the
leaf (or from the old tree's last subtree) up to the root. prove_* hashes these ranges, check_* folds the given
hashes along the same path: one list for both, so that they cannot disagree about the shape.

Trouble. Arguments that make no sense are an InputError when proving; whatever is wrong in a check is a ProofError,
missing and leftover hashes included; a store that returns other than what was asked is a Defect.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterable, Sequence

from extractor.errors import Defect, InputError, ProofError

HASH_BYTES = 32
MAXIMUM_SIZE = 2**53 - 1        # a size must survive as a JSON number
ReadHashes = Callable[[list[tuple[int, int]]], list[bytes]]
Range = tuple[int, int]         # leaves [lo, hi), lo a multiple of the largest power of two in hi - lo


def leaf_hash(entry: bytes) -> bytes:
    return hashlib.sha256(b"\x00" + entry).digest()


def node_hash(left: bytes, right: bytes) -> bytes:
    return hashlib.sha256(b"\x01" + left + right).digest()


def root_of(leaf_hashes: Sequence[bytes]) -> bytes:
    """Root of a tree given by all its leaf hashes: RFC 9162 section 2.1.1 word for word, the reference for the rest."""
    if not leaf_hashes:
        return hashlib.sha256(b"").digest()
    if len(leaf_hashes) == 1:
        return leaf_hashes[0]
    k = _split(len(leaf_hashes))
    return node_hash(root_of(leaf_hashes[:k]), root_of(leaf_hashes[k:]))


def append_nodes(size: int, leaf: bytes, read_hashes: ReadHashes) -> list[tuple[int, int, bytes]]:
    """The hashes (level, index, hash) to store when `leaf` becomes leaf number `size`, the leaf hash itself first."""
    _check_size(size)
    level, index, left_siblings = 0, size, []
    while index & 1:            # an odd index completes its parent
        left_siblings.append((level, index - 1))
        level, index = level + 1, index >> 1
    nodes = [(0, size, leaf)]
    for (level, left_index), left in zip(left_siblings, _read(left_siblings, read_hashes)):
        nodes.append((level + 1, left_index >> 1, node_hash(left, nodes[-1][2])))
    return nodes


def root(size: int, read_hashes: ReadHashes) -> bytes:
    """Root of the tree of the first `size` leaves."""
    _check_size(size)
    return _hash_ranges([(0, size)], read_hashes)[0] if size else root_of([])


def prove_inclusion(index: int, size: int, read_hashes: ReadHashes) -> list[bytes]:
    """Proof that the tree of size `size` has leaf `index`, at most 53 hashes, leaf first. RFC 9162 section 2.1.3.1."""
    _check_size(size)
    if not 0 <= index < size:
        raise InputError(f"a ledger of {size} entries has no entry {index}", code="out-of-range", field="/index")
    return _hash_ranges([beside for beside, _ in _inclusion_path(index, size)], read_hashes)


def check_inclusion(proof: Sequence[bytes], leaf: bytes, index: int, size: int, tree_root: bytes) -> None:
    """Raise ProofError unless the tree of size `size` and root `tree_root` holds the leaf hash `leaf` at `index`."""
    if not 0 <= index < size <= MAXIMUM_SIZE:
        raise ProofError(f"entry {index} cannot be in a ledger of {size} entries", code="bad-inclusion")
    path = _inclusion_path(index, size)
    _check_lengths([leaf, tree_root, *proof], len(proof), len(path), "inclusion")
    found = leaf
    for (_, is_left), hash_beside in zip(path, proof):
        found = node_hash(hash_beside, found) if is_left else node_hash(found, hash_beside)
    if found != tree_root:
        raise ProofError(f"the inclusion proof of entry {index} does not lead to the root", code="bad-inclusion")


def prove_consistency(old: int, new: int, read_hashes: ReadHashes) -> list[bytes]:
    """Proof that the tree of size `new` begins with that of size `old`; empty if old is 0 or new. RFC 9162, 2.1.4.1."""
    _check_size(new)
    if not 0 <= old <= new:
        raise InputError(f"a ledger of {new} entries did not grow from one of {old}", code="out-of-range", field="/old")
    if not old:
        return []
    start, path = _consistency_path(old, new)
    ranges = [beside for beside, _ in path]
    # A start at leaf 0 is the old tree itself: the checker knows its root.
    return _hash_ranges([start, *ranges] if start[0] else ranges, read_hashes)


def check_consistency(proof: Sequence[bytes], old: int, old_root: bytes, new: int, new_root: bytes) -> None:
    """Raise ProofError unless the tree (new, new_root) begins with the tree (old, old_root). RFC 9162 section 2.1.4."""
    if not 0 <= old <= new <= MAXIMUM_SIZE:
        raise ProofError(f"a ledger of {new} entries cannot have grown from one of {old}", code="bad-consistency")
    if not old:
        _check_lengths([old_root, new_root, *proof], len(proof), 0, "consistency")
        if old_root != root_of([]):
            raise ProofError("the root of the empty ledger is wrong", code="bad-consistency")
        if not new and new_root != old_root:
            raise ProofError("two ledgers of the same size have different roots", code="bad-consistency")
        return
    start, path = _consistency_path(old, new)
    _check_lengths([old_root, new_root, *proof], len(proof), len(path) + (start[0] > 0), "consistency")
    hashes = list(proof)
    found_old = found_new = hashes.pop(0) if start[0] else old_root
    for (_, is_left), hash_beside in zip(path, hashes):
        if is_left:             # what stands to the left of the old tree's end belongs to both trees
            found_old = node_hash(hash_beside, found_old)
            found_new = node_hash(hash_beside, found_new)
        else:
            found_new = node_hash(found_new, hash_beside)
    if found_old != old_root or found_new != new_root:
        raise ProofError(f"the ledger of {new} entries does not continue the one of {old}", code="bad-consistency")


def _split(leaves: int) -> int:
    """Largest power of two smaller than `leaves` >= 2."""
    return 1 << (leaves - 1).bit_length() - 1


def _inclusion_path(index: int, size: int) -> list[tuple[Range, bool]]:
    """The ranges beside the way from leaf `index` up to the root of [0, size), each with "it stands to the left"."""
    lo, hi, path = 0, size, []
    while hi - lo > 1:
        middle = lo + _split(hi - lo)
        if index < middle:
            path.append(((middle, hi), False))
            hi = middle
        else:
            path.append(((lo, middle), True))
            lo = middle
    return path[::-1]


def _consistency_path(old: int, new: int) -> tuple[Range, list[tuple[Range, bool]]]:
    """The last whole subtree of the old tree that is a subtree of the new one, and the ranges beside its way up."""
    lo, hi, path = 0, new, []
    while hi != old:
        middle = lo + _split(hi - lo)
        if old <= middle:
            path.append(((middle, hi), False))
            hi = middle
        else:
            path.append(((lo, middle), True))
            lo = middle
    return (lo, hi), path[::-1]


def _complete(leaves: Range) -> list[tuple[int, int]]:
    """The stored subtrees (level, index) that make up a range, largest first."""
    (lo, hi), parts = leaves, []
    while lo < hi:
        level = (hi - lo).bit_length() - 1
        parts.append((level, lo >> level))
        lo += 1 << level
    return parts


def _hash_ranges(ranges: Sequence[Range], read_hashes: ReadHashes) -> list[bytes]:
    """The hash of each range, with one read of the store."""
    parts = [_complete(leaves) for leaves in ranges]
    stored = iter(_read([place for part in parts for place in part], read_hashes))
    hashes = []
    for part in parts:
        subtrees = [next(stored) for _ in part]
        found = subtrees.pop()
        while subtrees:
            found = node_hash(subtrees.pop(), found)
        hashes.append(found)
    return hashes


def _read(places: list[tuple[int, int]], read_hashes: ReadHashes) -> list[bytes]:
    if not places:
        return []
    hashes = read_hashes(places)
    if len(hashes) != len(places) or any(len(one) != HASH_BYTES for one in hashes):
        raise Defect(f"the store was asked for {len(places)} hashes of {HASH_BYTES} bytes and returned something else")
    return hashes


def _check_size(size: int) -> None:
    if not 0 <= size <= MAXIMUM_SIZE:
        raise InputError(f"{size} is not a size a ledger can have", code="out-of-range", field="/size")


def _check_lengths(hashes: Iterable[bytes], given: int, needed: int, kind: str) -> None:
    if given != needed:
        raise ProofError(f"the {kind} proof has {given} hashes, but {needed} are needed", code=f"bad-{kind}")
    if any(len(one) != HASH_BYTES for one in hashes):
        raise ProofError(f"a hash of the {kind} proof does not have {HASH_BYTES} bytes", code=f"bad-{kind}")
