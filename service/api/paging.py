"""Pages of a list, newest first: `limit`, `before`, and the address of the next one (body and RFC 8288 Link)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Annotated, Any
from urllib.parse import urlencode

from fastapi import Query, Response

Limit = Annotated[int, Query(ge=1, le=10_000, description="items per page (the service may give fewer)")]
Before = Annotated[int | None, Query(ge=1, le=2**62, description="only items older than this place; from `next`")]


def next_page(response: Response, path: str, rows: Sequence[Any], limit: int, others: Mapping[str, Any]) -> str | None:
    """Address of the page after `rows`, of which one more than `limit` was fetched if there is one; sets Link."""
    if len(rows) <= limit:
        return None
    kept = {name: value for name, value in others.items() if value is not None}
    query = {"limit": limit, "before": rows[limit - 1].number} | kept
    address = f"{path}?{urlencode(query, doseq=True)}"
    response.headers["Link"] = f'<{address}>; rel="next"'
    return address
