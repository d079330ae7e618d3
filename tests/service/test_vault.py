"""Vault files: every change is noticed, and reading anywhere equals the plain bytes."""

from __future__ import annotations

import hashlib
import io
import random
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from extractor.errors import Defect
from service.custody.vault import (
    SEGMENT_BYTES, TAG_BYTES, VaultReader, VaultWriter, open_vault, read_vault, write_vault,
)
from service.errors import DamagedFile

KEY = hashlib.sha256(b"a key for tests").digest()
NAME = "segments/1.planes"
HEADER_BYTES = 57 + len(NAME)
SEALED = SEGMENT_BYTES + TAG_BYTES


def plain_bytes(count: int) -> bytes:
    return np.random.default_rng(20310504).bytes(count)


def stored(folder: Path, count: int) -> tuple[Path, bytes]:
    """A vault file of `count` bytes and its raw content."""
    path = folder / "1.planes"
    write_vault(path, KEY, NAME, plain_bytes(count))
    return path, path.read_bytes()


def refused(path: Path, raw: bytes, *, key: bytes = KEY, name: str = NAME) -> bool:
    """True if a file of this content is refused before or while it is read; no wrong byte may come out."""
    path.write_bytes(raw)
    try:
        with VaultReader(path, key, name) as reader:
            while reader.read(SEGMENT_BYTES):
                pass
    except DamagedFile:
        return True
    return False


@pytest.mark.parametrize("count", [0, 1, 100, SEGMENT_BYTES - 1, SEGMENT_BYTES, SEGMENT_BYTES + 1, 2 * SEGMENT_BYTES,
                                   3 * SEGMENT_BYTES + 5])
def test_what_was_written_is_read(tmp_path: Path, count: int) -> None:
    """Around every segment edge the file has the size its format says and gives the bytes back."""
    path, raw = stored(tmp_path, count)
    segments = max(1, -(-count // SEGMENT_BYTES))
    assert len(raw) == HEADER_BYTES + count + segments * TAG_BYTES
    assert read_vault(path, KEY, NAME) == plain_bytes(count)
    assert path.stat().st_mode & 0o777 == 0o600


@pytest.mark.parametrize("piece", [1, 4096, SEGMENT_BYTES - 1, SEGMENT_BYTES, 2 * SEGMENT_BYTES + 3])
def test_the_pieces_of_writing_do_not_matter(tmp_path: Path, piece: int) -> None:
    """However the bytes come in, the same plaintext is stored."""
    data = plain_bytes(2 * SEGMENT_BYTES + 17 if piece > 1 else 3000)
    with VaultWriter(tmp_path / "x", KEY, "seed") as writer:
        for at in range(0, len(data), piece):
            assert writer.write(np.frombuffer(data[at:at + piece], dtype=np.uint8)) == len(data[at:at + piece])
        assert writer.bytes == len(data)
        writer.commit()
    assert read_vault(tmp_path / "x", KEY, "seed") == data


def test_every_single_byte_change_is_noticed(tmp_path: Path) -> None:
    """Each byte of a small file, header included, changed in each of its bits."""
    path, raw = stored(tmp_path, 300)
    for place in range(len(raw)):
        for bit in range(8):
            changed = bytearray(raw)
            changed[place] ^= 1 << bit
            assert refused(path, bytes(changed)), (place, bit)


def test_changes_in_a_file_of_several_segments_are_noticed(tmp_path: Path) -> None:
    """Header, both ends of every segment and tag, and a hundred places drawn at random."""
    path, raw = stored(tmp_path, 2 * SEGMENT_BYTES + 500)
    within = (0, 1, SEGMENT_BYTES - 1, SEGMENT_BYTES, SEALED - 1)
    edges = [HEADER_BYTES + k * SEALED + d for k in range(3) for d in within]
    places = [*range(0, HEADER_BYTES, 5), *edges, len(raw) - 1, len(raw) - TAG_BYTES - 1]
    places += random.Random(7).choices(range(len(raw)), k=100)
    for place in {place for place in places if place < len(raw)}:
        changed = bytearray(raw)
        changed[place] ^= 0x10
        assert refused(path, bytes(changed)), place


def test_cutting_anywhere_near_an_edge_is_noticed(tmp_path: Path) -> None:
    """A file cut at, before or after each segment edge, inside the header, or to nothing, is refused."""
    path, raw = stored(tmp_path, 3 * SEGMENT_BYTES + 40)
    lengths = {HEADER_BYTES + k * SEALED + d for k in range(4) for d in (-17, -16, -1, 0, 1, 15, 16, 17)}
    lengths |= {0, 1, 16, 56, HEADER_BYTES - 1, len(raw) - 1, len(raw) - 16, len(raw) - 40}
    for length in sorted(length for length in lengths if 0 <= length < len(raw)):
        assert refused(path, raw[:length]), length


def test_cutting_at_an_edge_of_full_segments_is_noticed_on_opening(tmp_path: Path) -> None:
    """Even if the end is never read: the length is proven before anything is handed out."""
    path, raw = stored(tmp_path, 3 * SEGMENT_BYTES)
    path.write_bytes(raw[:HEADER_BYTES + 2 * SEALED])
    with pytest.raises(DamagedFile):
        VaultReader(path, KEY, NAME)


def test_bytes_after_the_end_are_noticed(tmp_path: Path) -> None:
    """One byte, one tag, a copy of the last or of the first segment appended."""
    path, raw = stored(tmp_path, 2 * SEGMENT_BYTES)
    first = raw[HEADER_BYTES:HEADER_BYTES + SEALED]
    for tail in (b"\x00", bytes(TAG_BYTES), bytes(TAG_BYTES + 1), raw[-SEALED:], first):
        assert refused(path, raw + tail)


def test_exchanged_segments_are_noticed(tmp_path: Path) -> None:
    """Segments swapped, repeated, or taken from another file of the same run and name."""
    path, raw = stored(tmp_path, 4 * SEGMENT_BYTES)
    other = stored(tmp_path, 4 * SEGMENT_BYTES)[1]
    head, parts = raw[:HEADER_BYTES], [raw[HEADER_BYTES + k * SEALED:HEADER_BYTES + (k + 1) * SEALED] for k in range(4)]
    foreign = other[HEADER_BYTES + SEALED:HEADER_BYTES + 2 * SEALED]
    for order in ([1, 0, 2, 3], [0, 2, 1, 3], [0, 0, 2, 3], [0, 1, 3, 2]):
        assert refused(path, head + b"".join(parts[k] for k in order)), order
    assert refused(path, head + parts[0] + foreign + parts[2] + parts[3])
    assert refused(path, other[:HEADER_BYTES] + b"".join(parts))
    assert not refused(path, raw)


def test_another_key_or_name_does_not_open(tmp_path: Path) -> None:
    """A file moved to another run or in another file's place is refused."""
    path, raw = stored(tmp_path, 1000)
    assert refused(path, raw, key=hashlib.sha256(b"another key").digest())
    assert refused(path, raw, name="segments/2.planes")
    assert refused(path, raw, name="segments/1.plane")
    assert refused(path, raw.replace(b"1.planes", b"2.planes"), name="segments/2.planes")


def test_the_same_content_never_looks_the_same(tmp_path: Path) -> None:
    """Two files of one key, name and content share neither salt nor ciphertext."""
    first, second = stored(tmp_path, 4096)[1], stored(tmp_path, 4096)[1]
    assert first[16:55] != second[16:55]
    assert not set(first[i:i + 16] for i in range(HEADER_BYTES, 4096)) & set(
        second[i:i + 16] for i in range(HEADER_BYTES, 4096))


@given(data=st.data())
@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_random_access_equals_plain_bytes(tmp_path: Path, data: st.DataObject) -> None:
    """Any mixture of seek, read, readinto and tell behaves as on a file of the plaintext."""
    count = 3 * SEGMENT_BYTES + 1000
    path = tmp_path / "1.planes"
    if not path.exists():
        write_vault(path, KEY, NAME, plain_bytes(count))
    near_edges = st.integers(0, 3).flatmap(lambda k: st.integers(-40, 40).map(lambda d: max(0, k * SEGMENT_BYTES + d)))
    places = st.one_of(near_edges, st.integers(0, count + 100))
    lengths = st.one_of(st.integers(0, 100), st.integers(0, 2 * SEGMENT_BYTES + 10))
    reader = data.draw(st.sampled_from([VaultReader, open_vault]))(path, KEY, NAME)
    with reader, io.BytesIO(plain_bytes(count)) as plain:
        for _ in range(data.draw(st.integers(1, 6))):
            step = data.draw(st.sampled_from(["seek", "end", "skip", "read", "readinto"]))
            if step == "seek":
                place = data.draw(places)
                assert reader.seek(place) == plain.seek(place)
            elif step == "end":
                back = data.draw(st.integers(0, count))
                assert reader.seek(-back, io.SEEK_END) == plain.seek(-back, io.SEEK_END)
            elif step == "skip":
                assert reader.seek(3, io.SEEK_CUR) == plain.seek(3, io.SEEK_CUR)
            elif step == "read":
                length = data.draw(lengths)
                assert reader.read(length) == plain.read(length)
            else:
                ours = bytearray(data.draw(lengths))
                theirs = bytearray(len(ours))
                assert reader.readinto(ours) == plain.readinto(theirs) and ours == theirs
            assert reader.tell() == plain.tell()


def test_numpy_reads_from_the_reader(tmp_path: Path) -> None:
    """It is an ordinary binary file for a parser: NumPy's own loader reads an array from it."""
    rounds = np.arange(300_000, dtype=np.int64)
    with VaultWriter(tmp_path / "x", KEY, "seed") as writer:
        np.lib.format.write_array(writer, rounds)
        writer.commit()
    with open_vault(tmp_path / "x", KEY, "seed") as reader:
        assert np.array_equal(np.lib.format.read_array(reader), rounds)


def test_nothing_appears_before_commit_and_nothing_stays_after_abort(tmp_path: Path) -> None:
    """The name appears complete or not at all; an earlier file of the name stays until then."""
    path = tmp_path / "bits"
    write_vault(path, KEY, "bits", b"first")
    with pytest.raises(ZeroDivisionError), VaultWriter(path, KEY, "bits") as writer:
        writer.write(bytes(3 * SEGMENT_BYTES))
        raise ZeroDivisionError
    with VaultWriter(path, KEY, "bits") as writer:
        writer.write(b"second")
    assert read_vault(path, KEY, "bits") == b"first" and list(tmp_path.iterdir()) == [path]
    for late in (lambda: writer.write(b"x"), writer.commit):
        with pytest.raises(ValueError, match="closed"):
            late()


def test_a_large_file_is_not_read_whole_by_mistake(tmp_path: Path) -> None:
    """read_vault has a limit."""
    write_vault(tmp_path / "x", KEY, "seed", bytes(1001))
    with pytest.raises(Defect):
        read_vault(tmp_path / "x", KEY, "seed", limit=1000)


def test_error_texts_hold_no_secret(tmp_path: Path) -> None:
    """Neither plaintext nor key nor the folder's path appears in what is raised."""
    path, raw = stored(tmp_path, 64)
    path.write_bytes(raw[:-1] + bytes([raw[-1] ^ 1]))
    with pytest.raises(DamagedFile) as caught:
        VaultReader(path, KEY, NAME)
    text = str(caught.value)
    assert KEY.hex() not in text and plain_bytes(64).hex() not in text and str(tmp_path) not in text


def test_a_missing_file_is_missing(tmp_path: Path) -> None:
    """Not there is not damaged."""
    with pytest.raises(FileNotFoundError):
        VaultReader(tmp_path / "x", KEY, NAME)
