"""Kinds of trouble that only a service has; the other three are in `extractor.errors`.

Unavailable     nothing is wrong with the request: the service cannot do it now    try again later
StorageFailed   the disk did not keep what it was asked to keep                    the operator acts; the process stops
DamagedFile     a stored file was changed, cut or extended since it was written    restore it, nothing read counts
KeyErased       the run's key is gone, and with it everything encrypted under it   nobody: this is the promise
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
