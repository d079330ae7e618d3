from __future__ import annotations

import pytest

from extractor.hashing.toeplitz import backends


@pytest.fixture(params=[name for name, present in backends().items() if present])
def backend(request: pytest.FixtureRequest) -> str:
    """Every backend that can run here, in turn."""
    return request.param
