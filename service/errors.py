"""Kinds of trouble that only a service has; the other three are in `extractor.errors`.

Unavailable     nothing is wrong with the request: the service cannot do it now    try again later
StorageFailed   the disk did not keep what it was asked to keep                    the operator acts; the process stops
DamagedFile     a stored file was changed, cut or extended since it was written    restore it, nothing read counts
KeyErased       the run's key is gone, and with it everything encrypted under it   nobody: this is the promise
NotFound, Conflict, Gone, BrokenTransfer   the request and the state do not fit    the caller looks and decides
"""

from __future__ import annotations

from extractor.errors import ProofError


class Unavailable(Exception):
    """The service cannot do this now; the same request may succeed later.

    code           stable word, kebab-case: "store-busy", "disk-full", ...
    retry_after_s  seconds after which trying again makes sense
    """

    def __init__(self, message: str, *, code: str = "unavailable", retry_after_s: float = 5.0) -> None:
        self.message, self.code, self.retry_after_s = message, code, retry_after_s
        super().__init__(message)


class StorageFailed(Exception):
    """A write or fsync failed. What is on disk is unknown: stop the process, never retry the same file handle."""

    def __init__(self, message: str, *, code: str = "storage-failed") -> None:
        self.message, self.code = message, code
        super().__init__(message)


class DamagedFile(ProofError):
    """A vault file or wrapped key does not authenticate: changed, cut, extended, swapped, or the wrong key."""

    def __init__(self, message: str, *, code: str = "damaged-file") -> None:
        super().__init__(message, code=code)


class KeyErased(Exception):
    """The run's key does not exist (any more)."""

    def __init__(self, message: str, *, code: str = "key-erased") -> None:
        self.message, self.code = message, code
        super().__init__(message)


class NotFound(Exception):
    """There is no such object for this caller; objects of other owners look the same."""

    def __init__(self, what: str) -> None:
        self.message, self.code = f"there is no such {what}", "not-found"
        super().__init__(self.message)


class Conflict(Exception):
    """The request does not fit the present state of its object; the caller looks at the state and decides.

    code           stable word, kebab-case: "run-sealed", "segments-missing", ...
    errors         what exactly, one dict per place (keys: pointer, detail, file, row, field)
    retry_after_s  seconds after which trying again makes sense, None if it never does
    """

    def __init__(self, message: str, *, code: str, errors: tuple[dict, ...] = (),
                 retry_after_s: float | None = None) -> None:
        self.message, self.code, self.errors, self.retry_after_s = message, code, errors, retry_after_s
        super().__init__(message)


class Gone(Exception):
    """What is asked for existed and was erased for good."""

    def __init__(self, message: str, *, code: str) -> None:
        self.message, self.code = message, code
        super().__init__(message)


class BrokenTransfer(Exception):
    """A body did not arrive as announced: cut, too slow, too long, or with another digest. The caller sends it again.

    code   "digest-mismatch", "upload-cut", "upload-too-slow", "upload-too-large"
    """

    def __init__(self, message: str, *, code: str) -> None:
        self.message, self.code = message, code
        super().__init__(message)
