"""The bundle as an archive: one form, openable by anybody, and no changed byte in it passes verification."""

from __future__ import annotations

import hashlib
import io
import shutil
import struct
import subprocess
import zipfile
import zlib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from extractor.errors import InputError, ProofError
from extractor.seal import archive, bundle, note
from extractor.seal.readme import README
from extractor.seal.verify import verify_bundle
from tests.extractor.seal import casting


def quiet(data: bytes, **arguments):
    return verify_bundle(data, say=lambda sentence: None, **arguments)


def flipped(data: bytes, place: int) -> bytes:
    """The data with one changed bit in one byte; which bit depends on the place, so all eight take their turn."""
    changed = bytearray(data)
    changed[place] ^= 1 << place % 8
    return bytes(changed)


def places(data: bytes) -> range:
    """Every byte of a short file, every ninth of a long one; nine is odd, so all bits take their turn."""
    return range(0, len(data), 1 if len(data) < 500 else 9)


def refused(data: bytes) -> None:
    with pytest.raises(ProofError) as caught:
        quiet(data)
    assert len(str(caught.value)) > 10


def test_common_zip_programs_open_the_archive() -> None:
    """The container is an ordinary zip: the standard reader finds the same files, stored, with a fixed date."""
    files = casting.certified().contents()
    with zipfile.ZipFile(io.BytesIO(bundle.pack(files))) as opened:
        assert opened.testzip() is None
        assert {name: opened.read(name) for name in opened.namelist()} == files
        assert opened.namelist() == sorted(bundle.FILES)
        for info in opened.infolist():
            assert (info.compress_type, info.external_attr >> 16) == (0, 0o100644)
            assert info.date_time == (1980, 1, 1, 0, 0, 0)


def test_same_run_same_bytes() -> None:
    """Nothing in a bundle depends on when or in which order it was packed."""
    files = casting.certified().contents()
    packed = bundle.pack(files)
    assert bundle.pack(dict(reversed(files.items()))) == packed == casting.certified().bundle()
    assert bundle.unpack(packed) == files


@pytest.mark.parametrize("which", [casting.certified, casting.refused])
def test_every_changed_byte_of_the_archive_is_refused(which) -> None:
    """Flip one bit in each byte of the bundle, once per byte: verification must refuse each with a sentence."""
    data = which().bundle()
    for place in range(len(data)):
        refused(flipped(data, place))


def test_every_cut_and_every_added_byte_is_refused() -> None:
    """An archive cut anywhere, or with something before or behind it, is refused."""
    data = casting.refused().bundle()
    for length in range(0, len(data), 7):
        refused(data[:length])
    for extra in (b"\0", b"PK", data, data[-22:]):
        refused(data + extra)
        refused(extra + data)


@pytest.mark.parametrize("name", sorted(bundle.FILES))
def test_a_changed_byte_of_a_file_is_refused_even_with_a_matching_checksum(name) -> None:
    """Change a file and pack it well again: SHA256SUMS must notice it."""
    files = casting.refused().contents()
    for place in places(files[name]):
        with pytest.raises(ProofError, match="SHA256SUMS does not match"):
            quiet(bundle.pack(files | {name: flipped(files[name], place)}))


@pytest.mark.parametrize("name", sorted(bundle.FILES - {bundle.SUMS}))
def test_a_changed_byte_of_a_file_is_refused_even_with_new_sums(name) -> None:
    """Change a file, make SHA256SUMS anew and pack: signatures, proofs and digests must still notice it."""
    files = casting.refused().contents()
    for place in places(files[name]):
        changed = files | {name: flipped(files[name], place)}
        refused(bundle.pack(changed | {bundle.SUMS: bundle.sums(changed)}))


@pytest.mark.parametrize("name", sorted(bundle.FILES))
def test_missing_and_foreign_files_are_refused_by_name(name) -> None:
    """A bundle has exactly its files."""
    files = casting.refused().contents()
    for changed, sentence in ((files.keys() - {name}, f"{name} is missing"),
                              (files.keys() | {f"x{name}"}, f"x{name} does not belong")):
        content = {one: files.get(one, b"") for one in changed}
        with pytest.raises(ProofError, match=sentence):
            quiet(bundle.pack(content | ({bundle.SUMS: bundle.sums(content)} if bundle.SUMS in content else {})))


@settings(max_examples=150, deadline=None, derandomize=True)
@given(st.binary(max_size=300), st.booleans())
def test_arbitrary_bytes_are_a_proof_error(data, like_a_zip) -> None:
    """Whatever the bytes, unpacking ends in ProofError and no other exception."""
    with pytest.raises(ProofError):
        bundle.unpack((b"PK\x03\x04" if like_a_zip else b"") + data)


def test_hostile_headers_are_refused_without_work() -> None:
    """Sizes beyond the end, huge counts, other names and other times are refused at once."""
    def local(name: bytes, data: bytes, size: int, date: int = 0x21) -> bytes:
        fields = (b"PK\x03\x04", 20, 0, 0, 0, date, zlib.crc32(data), size, size, len(name), 0)
        return struct.pack("<4s5H3I2H", *fields) + name + data

    for data in (local(b"a", b"x", 2**32 - 1), local(b"a", b"", 0), local(b"../a", b"x", 1), local(b"a/b", b"x", 1),
                 local(b"", b"x", 1), local(b"a\0", b"x", 1), local(b"\xff", b"x", 1), local(b"a", b"x", 1) * 2,
                 local(b"a", b"x", 1, 0x22), b"".join(local(b"f%d" % k, b"", 0) for k in range(65))):
        with pytest.raises(ProofError):
            bundle.unpack(data)
    with pytest.raises(ProofError, match="more than"):
        bundle.unpack(bytes(archive.MAXIMUM_BYTES + 2**17 + 1))


@pytest.mark.parametrize("files", [
    {}, {"a/b": b""}, {"": b""}, {".hidden": b""}, {"a\n": b""}, {f"f{k}": b"" for k in range(65)},
    {"a": bytes(archive.MAXIMUM_BYTES + 1)}], ids=["none", "folder", "empty", "hidden", "line", "many", "large"])
def test_what_cannot_be_read_back_is_not_packed(files) -> None:
    """Names and sizes the reader refuses are refused by the writer."""
    with pytest.raises(InputError):
        bundle.pack(files)


def test_an_entry_without_proof_is_not_bundled() -> None:
    """Entries and proofs come in pairs."""
    with pytest.raises(InputError):
        bundle.contents({}, [(0, b"{}")], [], "", casting.SIGNER)


def test_sums_are_in_the_form_sha256sum_reads() -> None:
    """Each line is the SHA-256 in hexadecimal, two spaces, the name; all files but SHA256SUMS itself, sorted."""
    files = casting.certified().contents()
    expected = [f"{hashlib.sha256(files[name]).hexdigest()}  {name}" for name in sorted(bundle.FILES - {bundle.SUMS})]
    assert files[bundle.SUMS].decode().splitlines() == expected


def test_the_commands_in_the_readme_check_the_signature(tmp_path) -> None:
    """What README.txt tells an auditor without our program to type must succeed, and fail on a changed report."""
    commands = README.split("openssl 3)\n")[1].split("\n\n")[0]
    files = casting.certified().contents()
    # The same steps without the programs, so that the recipe is tested wherever openssl is not installed.
    signed, line = files["report.note"].decode().split("\n\n")
    key = note.Verifier.from_text(files["key.txt"].decode().strip())
    assert f"{signed}\n" == f"bellassay report 1\n{hashlib.sha256(files['report.json']).hexdigest()}\n"
    assert len(signed.splitlines()) == 2 and len(line.splitlines()) == 1 and " " not in key.name
    if shutil.which("openssl") and shutil.which("sha256sum"):
        for name, data in files.items():
            (tmp_path / name).write_bytes(data)
        steps = ["sh", "-e", "-c", commands]
        done = subprocess.run(steps, cwd=tmp_path, capture_output=True, text=True, check=False)
        assert done.returncode == 0 and "Verified Successfully" in done.stdout, done.stderr
        (tmp_path / "report.json").write_bytes(files["report.json"].replace(b"run-41", b"run-42"))
        assert subprocess.run(steps, cwd=tmp_path, capture_output=True, check=False).returncode != 0
