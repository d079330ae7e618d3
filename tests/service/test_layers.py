"""The arrows inside the service, read from the source."""

from __future__ import annotations

import ast
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2] / "service"
HTTP = {"fastapi", "starlette", "uvicorn", "httptools", "pydantic"}
MAY_SPEAK_HTTP = ("api", "console", "supervisor.py", "connections.py")
JOINS = ("app.py", "store")


def imports(path: Path) -> set[str]:
    """Dotted names of what a module imports when it is loaded (not inside functions or for type checking)."""
    found: set[str] = set()
    for node in ast.parse(path.read_text(encoding="utf-8")).body:
        if isinstance(node, ast.Import):
            found |= {name.name for name in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found |= {f"{node.module}.{name.name}" for name in node.names}
    return found


def modules() -> list[tuple[str, set[str]]]:
    return [(path.relative_to(ROOT).parts[0], imports(path)) for path in ROOT.rglob("*.py")]


def test_no_http_below_the_api() -> None:
    """Uploads, jobs, custody, ledger and store could be served by something else: they know no HTTP."""
    wrong = [(place, name) for place, names in modules() if place not in MAY_SPEAK_HTTP
             for name in names if name.split(".")[0] in HTTP]
    assert not wrong


def test_only_one_module_names_a_concrete_store() -> None:
    """Everything else works with any store that keeps the contract."""
    wrong = [(place, name) for place, names in modules() if place not in JOINS
             for name in names if name.startswith(("service.store.sqlite", "service.store.statements", "sqlalchemy"))]
    assert not wrong


def test_jobs_and_uploads_do_not_look_upwards() -> None:
    """What works does not know what serves."""
    above = ("service.api", "service.console", "service.app", "service.supervisor", "service.commands", "service.cli")
    wrong = [(place, name) for place, names in modules() if place not in (*MAY_SPEAK_HTTP, "commands", "cli.py", "app.py")
             for name in names if name.startswith(above)]
    assert not wrong
