"""Runs brought to the point where a worker takes over, without any HTTP."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from service.parts import Parts
from tests.service.jobs.runs import SealedRuns
from tests.service.harness import opened


@pytest.fixture
def parts(tmp_path: Path) -> Iterator[Parts]:
    one = opened(tmp_path)
    yield one
    one.close()


@pytest.fixture
def sealed(parts: Parts) -> Callable[..., str]:
    """Makes a sealed run with all its rounds; returns its id."""
    return SealedRuns(parts).make
