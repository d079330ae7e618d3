"""The Merkle tree, exhaustively for small trees: every size, leaf and pair of sizes, every bit of every hash."""

from __future__ import annotations

import hashlib
from functools import cache

import pytest

from extractor.errors import Defect, InputError, ProofError
from extractor.seal import merkle

SIZES = 66


class Store:
    """A tree of `size` leaves kept as `append_nodes` says; counts the reads."""

    def __init__(self, size: int) -> None:
        self.hashes: dict[tuple[int, int], bytes] = {}
        self.leaves: list[bytes] = []
        self.reads = 0
        for number in range(size):
            leaf = merkle.leaf_hash(b"entry %d" % number)
            for level, index, value in merkle.append_nodes(number, leaf, self.read):
                assert (level, index) not in self.hashes
                self.hashes[level, index] = value
            self.leaves.append(leaf)

    def read(self, places: list[tuple[int, int]]) -> list[bytes]:
        self.reads += 1
        return [self.hashes[place] for place in places]


@cache
def store() -> Store:
    return Store(SIZES)


@cache
def root(size: int) -> bytes:
    return merkle.root_of(store().leaves[:size])


def bent(hashes: list[bytes]):
    """Every list of hashes that differs from the given one in one bit."""
    for place, value in enumerate(hashes):
        for bit in range(256):
            changed = bytearray(value)
            changed[bit // 8] ^= 1 << bit % 8
            yield hashes[:place] + [bytes(changed)] + hashes[place + 1:]


def test_stored_hashes_are_exactly_the_complete_subtrees() -> None:
    """(level, index) must be the root of its 2^level leaves, for all complete subtrees and no others."""
    expected = {(level, index): merkle.root_of(store().leaves[index << level:index + 1 << level])
                for level in range(7) for index in range(SIZES >> level)}
    assert store().hashes == expected


@pytest.mark.parametrize("size", range(SIZES + 1))
def test_root_from_stored_hashes_is_the_root_by_definition(size) -> None:
    """The root must come out right from complete subtrees, with at most one read."""
    before = store().reads
    assert merkle.root(size, store().read) == root(size)
    assert store().reads - before == (size > 0)


@pytest.mark.parametrize("size", range(1, SIZES))
def test_every_leaf_of_every_tree_is_proved(size) -> None:
    """Each inclusion proof must hold for its leaf, index and root, and be no longer than the tree is high."""
    for index in range(size):
        proof = merkle.prove_inclusion(index, size, store().read)
        assert len(proof) <= (size - 1).bit_length()
        merkle.check_inclusion(proof, store().leaves[index], index, size, root(size))


@pytest.mark.parametrize("size", range(1, SIZES))
def test_an_inclusion_proof_holds_for_nothing_else(size) -> None:
    """Another index, leaf, root, a missing, doubled or exchanged hash must each be refused."""
    for index in range(size):
        proof = merkle.prove_inclusion(index, size, store().read)
        leaf, top = store().leaves[index], root(size)
        wrong = [(proof, leaf, other, size, top) for other in range(-1, size + 1) if other != index]
        wrong += [(proof, store().leaves[(index + 1) % SIZES], index, size, top)]
        wrong += [(proof, leaf, index, size, root(size + 1))]
        wrong += [(proof[:-1], leaf, index, size, top), (proof[1:], leaf, index, size, top)] if proof else []
        wrong += [([*proof, top], leaf, index, size, top), ([leaf, *proof], leaf, index, size, top)]
        wrong += [(proof[::-1], leaf, index, size, top)] if len(proof) > 1 else []
        wrong += [([*proof[:-1], proof[-1][:31]], leaf, index, size, top)] if proof else []
        wrong += [(proof, leaf[:31], index, size, top), (proof, leaf, index, size, top + b"\0")]
        for case in wrong:
            with pytest.raises(ProofError):
                merkle.check_inclusion(*case)


@pytest.mark.parametrize("size", [1, 2, 3, 5, 8, 13, 33, 64, 65])
def test_every_bent_bit_of_an_inclusion_proof_is_noticed(size) -> None:
    """Flip each bit of each hash of each proof, of the leaf and of the root: all must be refused."""
    for index in range(size):
        proof = merkle.prove_inclusion(index, size, store().read)
        if index % 8 and index != size - 1 and size > 13:
            continue
        for *hashes, leaf, top in bent([*proof, store().leaves[index], root(size)]):
            with pytest.raises(ProofError):
                merkle.check_inclusion(hashes, leaf, index, size, top)


@pytest.mark.parametrize("new", range(SIZES))
def test_every_pair_of_sizes_is_consistent(new) -> None:
    """Each tree must be proved a continuation of every smaller one, and of itself."""
    for old in range(new + 1):
        proof = merkle.prove_consistency(old, new, store().read)
        assert len(proof) <= new.bit_length() + 1
        merkle.check_consistency(proof, old, root(old), new, root(new))


@pytest.mark.parametrize("new", range(1, SIZES))
def test_a_consistency_proof_holds_for_nothing_else(new) -> None:
    """Other sizes, roots, missing or leftover hashes must be refused."""
    for old in range(1, new + 1):
        proof = merkle.prove_consistency(old, new, store().read)
        wrong = [(proof, old, root(old - 1), new, root(new)), (proof, old, root(old), new, root(new + 1)),
                 ([*proof, root(new)], old, root(old), new, root(new)), (proof, old, root(old)[:31], new, root(new)),
                 (proof, new + 1, root(new + 1), new, root(new))]
        wrong += [(part, old, root(old), new, root(new)) for part in (proof[:-1], proof[1:]) if proof]
        for case in wrong:
            with pytest.raises(ProofError):
                merkle.check_consistency(*case)


@pytest.mark.parametrize("old, new", [
    (1, 2), (3, 7), (4, 7), (6, 7), (5, 8), (7, 8), (31, 33), (32, 64), (33, 65), (64, 65)])
def test_every_bent_bit_of_a_consistency_proof_is_noticed(old, new) -> None:
    """Flip each bit of each hash of the proof and of both roots: all must be refused."""
    proof = merkle.prove_consistency(old, new, store().read)
    for *hashes, old_root, new_root in bent([*proof, root(old), root(new)]):
        with pytest.raises(ProofError):
            merkle.check_consistency(hashes, old, old_root, new, new_root)


def test_a_rewritten_ledger_is_not_a_continuation() -> None:
    """Change one old entry: no proof the altered ledger can make satisfies the holder of the old checkpoint."""
    altered = Store(0)
    for number in range(20):
        leaf = merkle.leaf_hash(b"entry %d" % number if number != 3 else b"forged")
        for level, index, value in merkle.append_nodes(number, leaf, altered.read):
            altered.hashes[level, index] = value
    new_root = merkle.root(20, altered.read)
    for old in range(4, 21):
        with pytest.raises(ProofError):
            merkle.check_consistency(merkle.prove_consistency(old, 20, altered.read), old, root(old), 20, new_root)


def test_the_empty_tree_begins_every_tree() -> None:
    """Size 0 has the hash of nothing as root and needs no proof; another root or any proof hash is refused."""
    empty = hashlib.sha256(b"").digest()
    merkle.check_consistency([], 0, empty, 5, root(5))
    for case in (([], 0, root(1), 5, root(5)), ([root(1)], 0, empty, 5, root(5)), ([], 0, empty, 0, root(1))):
        with pytest.raises(ProofError):
            merkle.check_consistency(*case)


def test_arguments_that_make_no_sense_are_input_errors() -> None:
    """Asking for what cannot exist is the caller's mistake and says so."""
    read = store().read
    for index, size in ((0, 0), (-1, 5), (5, 5), (0, -1), (0, 2**53)):
        with pytest.raises(InputError):
            merkle.prove_inclusion(index, size, read)
    for old, new in ((-1, 5), (6, 5), (0, -1), (1, 2**53)):
        with pytest.raises(InputError):
            merkle.prove_consistency(old, new, read)
    with pytest.raises(InputError):
        merkle.append_nodes(-1, root(1), read)
    with pytest.raises(InputError):
        merkle.root(-1, read)


@pytest.mark.parametrize("answer", [[], [b"short"], [bytes(32)] * 9])
def test_a_store_that_answers_wrongly_is_a_defect(answer) -> None:
    """Too few, too many or malformed hashes from our own store must stop the work, not enter a proof."""
    for operation in (lambda: merkle.root(5, lambda _: answer), lambda: merkle.prove_inclusion(1, 5, lambda _: answer),
                      lambda: merkle.prove_consistency(3, 7, lambda _: answer),
                      lambda: merkle.append_nodes(3, root(1), lambda _: answer)):
        with pytest.raises(Defect):
            operation()


def test_large_trees_need_one_read_of_few_hashes() -> None:
    """A proof in a tree of nearly 2^53 leaves must need one read, of at most 64 * 64 hashes."""
    asked = []

    def read(places):
        asked.append(len(places))
        return [hashlib.sha256(repr(place).encode()).digest() for place in places]

    size = 2**53 - 1
    top = merkle.root(size, read)
    leaf = read([(0, 2**52 + 12345)])[0]
    proof = merkle.prove_inclusion(2**52 + 12345, size, read)
    assert len(proof) <= 53
    assert len(merkle.prove_consistency(2**51 + 1, size, read)) <= 54
    assert max(asked) <= 64 * 64
    with pytest.raises(ProofError):         # the made-up subtrees do not fit together
        merkle.check_inclusion(proof, leaf, 2**52 + 12345, size, top)
