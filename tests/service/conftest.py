"""One service per test module for tests that only add to it, a fresh one where a test changes its settings."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import pytest

from tests.service.harness import Caller, Service


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    running = Service(tmp_path_factory.mktemp("service"))
    yield running
    running.close()


@pytest.fixture(scope="module")
def north(service: Service) -> Caller:
    """An owner with all scopes but admin."""
    return service.caller("north")


@pytest.fixture
def start(tmp_path) -> Iterator[Callable[..., Service]]:
    """Starts services with other settings, all on one data folder."""
    running: list[Service] = []

    def starter(**changed) -> Service:
        running.append(Service(tmp_path, **changed))
        return running[-1]

    yield starter
    for one in running:
        one.close()
