"""The service's clock: the only place that asks what time it is."""

from __future__ import annotations

import time
from datetime import UTC, datetime


def now_s() -> float:
    """Seconds since 1970 UTC."""
    return time.time()


def now_text() -> str:
    """The same as RFC 3339 UTC text with whole seconds."""
    return datetime.fromtimestamp(now_s(), UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
