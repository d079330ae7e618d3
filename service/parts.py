"""What the service's parts are handed: the opened store, ledger, keys and folders, joined by `app.open_parts`."""

from __future__ import annotations

from dataclasses import dataclass

from service.custody.run_keys import RunKeys
from service.ledger import Ledger
from service.settings import ServiceSettings
from service.store.blobs import Blobs
from service.store.contracts import Store


@dataclass(frozen=True)
class Parts:
    """One data folder, open. Safe for several threads; a child process opens its own."""

    settings: ServiceSettings
    store: Store
    ledger: Ledger
    keys: RunKeys
    blobs: Blobs

    def close(self) -> None:
        self.store.close()
