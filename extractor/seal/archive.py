"""The container of a bundle: a zip archive of which every byte is determined by the files in it.

Stored (no compression), names sorted, all times 1980-01-01 00:00, mode 0644, no extra fields and no comment. Any zip
program opens it. Reading takes nothing the archive says about itself on trust: the files are cut out, packed again,
and the result must be the same bytes. So no byte can differ without being noticed, and nothing can hide between files.
"""

from __future__ import annotations

import re
import struct
import zlib
from collections.abc import Mapping

from extractor.errors import InputError, ProofError

MAXIMUM_FILES = 64
MAXIMUM_BYTES = 2**26           # of the whole archive; a bundle with ten thousand segments has a few MiB
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,99}\Z", re.ASCII)
_LOCAL, _CENTRAL, _END = b"PK\x03\x04", b"PK\x01\x02", b"PK\x05\x06"
_VERSION, _UNIX, _DATE, _MODE = 20, 3 << 8 | 20, 0x21, 0o100644 << 16
_LOCAL_FORM, _CENTRAL_FORM, _END_FORM = "<4s5H3I2H", "<4s6H3I5H2I", "<4s4H2IH"
_LOCAL_BYTES = struct.calcsize(_LOCAL_FORM)


def pack(files: Mapping[str, bytes]) -> bytes:
    """The archive of some files. Errors raised: InputError for bad names, too many files or too many bytes."""
    if not 1 <= len(files) <= MAXIMUM_FILES or not all(_NAME.match(name) for name in files):
        raise InputError(f"an archive holds 1 to {MAXIMUM_FILES} files with plain names", code="bad-archive")
    if sum(map(len, files.values())) > MAXIMUM_BYTES:
        raise InputError(f"an archive has at most {MAXIMUM_BYTES} bytes", code="archive-too-large")
    body, directory = bytearray(), bytearray()
    for name in sorted(files):
        data, encoded = files[name], name.encode("ascii")
        common = (0, 0, 0, _DATE, zlib.crc32(data), len(data), len(data), len(encoded), 0)
        directory += struct.pack(_CENTRAL_FORM, _CENTRAL, _UNIX, _VERSION, *common, 0, 0, 0, _MODE, len(body)) + encoded
        body += struct.pack(_LOCAL_FORM, _LOCAL, _VERSION, *common) + encoded + data
    end = struct.pack(_END_FORM, _END, 0, 0, len(files), len(files), len(directory), len(body), 0)
    return bytes(body + directory + end)


def unpack(data: bytes) -> dict[str, bytes]:
    """The files of an archive that is exactly what `pack` makes of them, else ProofError, whatever the bytes."""
    if len(data) > MAXIMUM_BYTES + 2**17:
        raise ProofError(f"the archive has more than {MAXIMUM_BYTES} bytes", code="bad-archive")
    files: dict[str, bytes] = {}
    at = 0
    while data[at:at + 4] == _LOCAL:
        if at + _LOCAL_BYTES > len(data) or len(files) == MAXIMUM_FILES:
            raise ProofError("the archive is cut short or has too many files", code="bad-archive")
        *_, checksum, _, size, name_bytes, _ = struct.unpack_from(_LOCAL_FORM, data, at)
        start = at + _LOCAL_BYTES + name_bytes
        name = data[at + _LOCAL_BYTES:start].decode("latin-1")
        at = start + size
        if at > len(data):
            raise ProofError("the archive is cut short, or the length of a file was changed", code="bad-archive")
        if not _NAME.match(name) or name in files:
            raise ProofError(f"the archive holds a file with the bad name {name[:100]!r}", code="bad-archive")
        files[name] = data[start:at]
        if zlib.crc32(files[name]) != checksum:
            raise ProofError(f"{name} in the archive was changed: its checksum does not match", code="bad-archive")
    if not files:
        raise ProofError("is not a bundle: it does not begin like a zip archive", code="bad-archive")
    if sum(map(len, files.values())) > MAXIMUM_BYTES or pack(files) != data:
        raise ProofError("the archive was changed around its files: packed again, they give other bytes",
                         code="bad-archive")
    return files
