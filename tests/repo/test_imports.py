"""The arrows between the parts, read from the source: who may import whom."""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
STAGES = ("records", "tally", "bell", "entropy", "hashing", "seal")
COMMON = ("model", "errors", "documents")
SEES_SEVERAL = ("extractor/pipeline.py", "extractor/seal/verify.py")
OUTSIDE_EVERYWHERE = {"numpy", "scipy"}
OUTSIDE_IN_SEAL = {"cryptography", "rfc8785"}
FORBIDDEN_IN_EXTRACTOR = {  # no clock, no network, no database, no environment
    "time",
    "datetime",
    "socket",
    "ssl",
    "http",
    "urllib",
    "asyncio",
    "sqlite3",
    "secrets",
    "subprocess",
    "random",
}


def sources(package: str) -> list[Path]:
    return sorted((ROOT / package).rglob("*.py"))


def imported(path: Path) -> Iterator[tuple[str, int]]:
    """Every imported module as (dotted name, line), `from m import n` as m.n, wherever in the file it stands."""
    package = path.relative_to(ROOT).with_suffix("").parts[:-1]
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            yield from ((name.name, node.lineno) for name in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = [] if node.level == 0 else list(package[: len(package) - node.level + 1])
            base += node.module.split(".") if node.module else []
            yield from ((".".join([*base, name.name]), node.lineno) for name in node.names)


def stage_of(path: Path) -> str | None:
    """The stage a file of extractor belongs to, None for model, errors, documents, pipeline and the package itself."""
    first = path.relative_to(ROOT / "extractor").parts[0].removesuffix(".py")
    return first if first in STAGES else None


def trouble(package: str, wrong) -> list[str]:
    """Places in `package` where wrong(path, dotted module name) is true."""
    return [
        f"{path.relative_to(ROOT)}:{line} imports {module}"
        for path in sources(package)
        for module, line in imported(path)
        if wrong(path, module)
    ]


def test_extractor_never_imports_the_service() -> None:
    """The extractor must run on an auditor's machine without the service."""
    assert not trouble("extractor", lambda path, module: module.split(".")[0] in ("service", "tests"))


def test_nothing_in_the_product_imports_the_tests() -> None:
    """Test helpers must not become part of the product."""
    assert not trouble("service", lambda path, module: module.split(".")[0] == "tests")


def test_extractor_uses_only_the_allowed_outside_packages() -> None:
    """Besides the standard library: numpy and scipy, and in seal/ the signature and JSON packages."""

    def wrong(path: Path, module: str) -> bool:
        root = module.split(".")[0]
        allowed = OUTSIDE_EVERYWHERE | (OUTSIDE_IN_SEAL if stage_of(path) == "seal" else set())
        return root != "extractor" and root not in sys.stdlib_module_names and root not in allowed

    assert not trouble("extractor", wrong)


def test_extractor_has_no_clock_network_database_or_chance() -> None:
    """Time, seeds and keys are arguments: the extractor imports no module that could fetch them."""
    assert not trouble("extractor", lambda path, module: module.split(".")[0] in FORBIDDEN_IN_EXTRACTOR)


def test_extractor_does_not_read_the_environment() -> None:
    """No result may depend on an environment variable."""
    assert not trouble("extractor", lambda path, module: module in ("os.environ", "os.getenv"))
    reads = [
        f"{path.relative_to(ROOT)}:{node.lineno}"
        for path in sources("extractor")
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Attribute) and node.attr in ("environ", "getenv", "urandom")
    ]
    assert not reads


def test_stages_do_not_import_each_other() -> None:
    """A stage sees model, errors, documents and its own folder; only pipeline and seal/verify see several stages."""

    def wrong(path: Path, module: str) -> bool:
        parts = module.split(".")
        if parts[0] != "extractor" or stage_of(path) is None or str(path.relative_to(ROOT)) in SEES_SEVERAL:
            return False
        return len(parts) < 2 or parts[1] not in (*COMMON, stage_of(path))

    assert not trouble("extractor", wrong)


def test_common_values_know_no_stage() -> None:
    """model, errors and documents stand below every stage."""

    def wrong(path: Path, module: str) -> bool:
        parts = module.split(".")
        return (
            path.parent == ROOT / "extractor"
            and path.stem in COMMON
            and parts[0] == "extractor"
            and (len(parts) < 2 or parts[1] not in COMMON)
        )

    assert not trouble("extractor", wrong)


def test_the_client_half_of_the_service_stands_alone() -> None:
    """client.py and transport.py speak HTTP to the service and must import neither its store nor its jobs."""

    def wrong(path: Path, module: str) -> bool:
        return path.name in ("client.py", "transport.py") and not (
            module.split(".")[0] != "service" or module.startswith("service.transport.")
        )

    assert not trouble("service", wrong)


@pytest.mark.parametrize(
    "text, expected",
    [
        ("import a.b", {"a.b"}),
        ("from extractor.bell import score", {"extractor.bell.score"}),
        ("from . import planes", {"extractor.records.planes"}),
        ("from ..bell.score import Score", {"extractor.bell.score.Score"}),
        ("def f():\n    from service import app", {"service.app"}),
    ],
)
def test_imports_are_found_in_every_spelling(text: str, expected: set[str], tmp_path: Path, monkeypatch) -> None:
    """Absolute, relative and late imports must all be seen, or the rules above check nothing."""
    path = tmp_path / "extractor" / "records" / "example.py"
    path.parent.mkdir(parents=True)
    path.write_text(text)
    monkeypatch.setattr(sys.modules[__name__], "ROOT", tmp_path)
    assert {module for module, _ in imported(path)} == expected
