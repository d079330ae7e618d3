"""Where the parts are joined: the only module of the service that names a concrete store."""

from __future__ import annotations

from typing import TYPE_CHECKING

from service.custody.run_keys import RunKeys
from service.ledger import Ledger
from service.parts import Parts
from service.settings import ServiceSettings
from service.store.blobs import Blobs
from service.store.contracts import Store
from service.store.sqlite import SqliteStore

if TYPE_CHECKING:
    from fastapi import FastAPI


def open_store(settings: ServiceSettings) -> Store:
    """The database alone (for tokens); made if missing."""
    Blobs(settings.data).prepare()
    return SqliteStore(settings.database_path, wait_s=settings.store_wait_s)


def open_parts(settings: ServiceSettings) -> Parts:
    """Everything in the data folder; keys and database are made on the very first start.

    Errors raised: InputError with instructions if something that must be there is missing or does not fit.
    """
    blobs = Blobs(settings.data, free_disk_bytes=settings.free_disk_bytes)
    blobs.prepare()
    keys = RunKeys.open(blobs.runs, settings.master_key_path)
    store = open_store(settings)
    try:
        ledger = Ledger.open(store, key_path=settings.ledger_key_path, origin=settings.ledger_origin,
                             copy_path=settings.checkpoint_path)
    except BaseException:
        store.close()
        raise
    return Parts(settings, store, ledger, keys, blobs)


def create_app(settings: ServiceSettings) -> FastAPI:
    """The HTTP application with everything behind it opened; without workers, which `supervisor.serve` starts."""
    from service.api.http import build      # late: a worker process opens the parts and needs no HTTP

    return build(open_parts(settings))
