"""/docs: the description of the interface as one page, made from /openapi.json; needs no network and no script."""

from __future__ import annotations

import json
from html import escape
from typing import Any

from fastapi import APIRouter, Request
from fastapi.responses import HTMLResponse

router = APIRouter(tags=["operation"])
_STYLE = """body{font:16px/1.5 system-ui,sans-serif;max-width:60rem;margin:2rem auto;padding:0 1rem;color:#1a1a1a}
h2{margin-top:2.5rem;border-bottom:1px solid #bbb}h3{font-size:1.05rem;margin:1.5rem 0 .3rem}
code,pre{font:14px/1.4 ui-monospace,monospace}pre{background:#f4f4f2;padding:.6rem;overflow-x:auto}
.method{display:inline-block;min-width:3.5rem;font-weight:700}
table{border-collapse:collapse}td{vertical-align:top;padding:.15rem .8rem .15rem 0}"""


@router.get("/docs", include_in_schema=False, response_class=HTMLResponse)
def page(request: Request) -> HTMLResponse:
    return HTMLResponse(render(request.app.openapi()), headers={
        "Content-Security-Policy": "default-src 'none'; style-src 'unsafe-inline'"})


def render(openapi: dict[str, Any]) -> str:
    """The whole page."""
    by_tag: dict[str, list[str]] = {}
    for path, operations in openapi["paths"].items():
        for method, operation in operations.items():
            by_tag.setdefault((operation.get("tags") or ["other"])[0], []).append(_operation(method, path, operation))
    sections = "".join(f"<h2>{escape(tag)}</h2>{''.join(made)}" for tag, made in by_tag.items())
    schemas = "".join(_schema(name, one) for name, one in sorted(openapi["components"]["schemas"].items()))
    title = escape(openapi["info"]["title"])
    return (f'<!doctype html><html lang="en"><head><meta charset="utf-8">'
            f'<meta name="viewport" content="width=device-width"><title>{title}: interface</title>'
            f"<style>{_STYLE}</style></head><body><main><h1>{title}: interface</h1>"
            f"<p>{escape(openapi['info'].get('description', '')).replace('**', '')}</p>"
            f'<p>For programs: <a href="/openapi.json">/openapi.json</a></p>'
            f"{sections}<h2>Documents</h2>{schemas}</main></body></html>")


def _operation(method: str, path: str, operation: dict[str, Any]) -> str:
    parameters = "".join(
        f"<tr><td><code>{escape(one['name'])}</code></td>"
        f"<td>{escape(one['in'])}{', required' if one.get('required') else ''}</td>"
        f"<td>{escape(one.get('description', ''))}</td></tr>" for one in operation.get("parameters", ()))
    body = "".join(f"<p>Body: {escape(kind)} {_reference(one.get('schema', {}))}</p>"
                   for kind, one in operation.get("requestBody", {}).get("content", {}).items())
    answers = "".join(
        f"<tr><td>{escape(status)}</td><td>{escape(one.get('description', ''))} "
        f"{' '.join(_reference(shape.get('schema', {})) for shape in one.get('content', {}).values())}</td></tr>"
        for status, one in sorted(operation["responses"].items()))
    name = escape(operation.get("operationId", ""))
    return (f'<h3 id="{name}"><span class="method">{method.upper()}</span> <code>{escape(path)}</code></h3>'
            f"<p>{escape(operation.get('summary', ''))}. {escape(operation.get('description', ''))}</p>"
            f"{f'<table>{parameters}</table>' if parameters else ''}{body}<table>{answers}</table>")


def _reference(schema: dict[str, Any]) -> str:
    name = schema.get("$ref", "").rpartition("/")[2]
    return f'<a href="#schema-{escape(name)}">{escape(name)}</a>' if name else ""


def _schema(name: str, schema: dict[str, Any]) -> str:
    return (f'<h3 id="schema-{escape(name)}">{escape(name)}</h3>'
            f"<details><summary>{escape(schema.get('description', 'fields'))}</summary>"
            f"<pre>{escape(json.dumps(schema, indent=1, ensure_ascii=False))}</pre></details>")
