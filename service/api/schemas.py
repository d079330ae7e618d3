"""The wire types: what goes in and out as JSON. Values of the model have their own documents (`extractor.documents`).

Strict: an unknown field, a number in quotes or a boolean in place of a number is refused. Times are RFC 3339 UTC.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from fastapi import Path
from pydantic import BaseModel, ConfigDict, Field

DIGEST = r"^sha256:[0-9a-f]{64}$"
EXAMPLE_DIGEST = "sha256:9f86d081884c7d659a2feaa0c55ad015a3bf4f1b2b0b822cd15d6c15b0f00a08"
TIME = "2031-05-04T09:30:00Z"
State = Literal["open", "sealed", "working", "certified", "refused", "failed", "collected", "erased"]
Stage = Literal["tally", "certify", "seed", "hash", "publish"]
Method = Literal["factor-table", "factor-closed", "eat-2018", "eat-2019"]
OutputRule = Literal["fixed", "credit"]
Disclosure = Literal["confidential", "public"]
Bit = Literal[0, 1]
RunId = Annotated[str, Path(description="id of the run", examples=["r5ce1a7d02b94e683"])]
DeclarationId = Annotated[str, Path(description="id of the recorded declaration", examples=["d41f0a9b3c5d7e682"])]


class _In(BaseModel):
    model_config = ConfigDict(strict=True, extra="forbid")


class _Out(BaseModel):
    model_config = ConfigDict(extra="forbid")


def _example(value: Any) -> ConfigDict:
    return ConfigDict(json_schema_extra={"examples": [value]})


# ---- problems

class ProblemPlace(_Out):
    """One place at fault."""

    detail: str
    pointer: str | None = Field(None, description="JSON pointer into the body that was sent")
    file: str | None = Field(None, description="name of the round file")
    row: int | None = Field(None, description="round within the file, counted from 1")
    field: str | None = Field(None, description="plane (x, y, a, b, t, round), query or path parameter")


class Problem(_Out):
    """RFC 9457 problem details; `code` is stable, `detail` is for people."""

    type: str
    title: str
    status: int
    detail: str
    code: str
    errors: list[ProblemPlace] = []
    model_config = ConfigDict(extra="forbid", json_schema_extra={"examples": [{
        "type": "urn:bellassay:problem:not-a-bit", "title": "A value is not acceptable", "status": 422,
        "detail": "file night-1.csv, row 17, field a: 3 is not a bit", "code": "not-a-bit",
        "errors": [{"detail": "3 is not a bit", "file": "night-1.csv", "row": 17, "field": "a"}]}]})


# ---- declarations

class SettingsDocument(_In):
    """How the settings of a round come about."""

    test_probability: float = Field(1.0, gt=0, le=1, description="P(t = 1)")
    distribution: list[float] = Field([0.25] * 4, min_length=4, max_length=4,
                                      description="P(x, y | t = 1) for 00, 01, 10, 11")
    generation: list[Bit] = Field([0, 0], min_length=2, max_length=2, description="settings of t = 0 rounds")
    bias: float = Field(0.0, ge=0, le=0.25, description="how far off each setting bit's probability may be")


class ConventionDocument(_In):
    minus: list[Bit] = Field([1, 1], min_length=2, max_length=2, description="setting pair that enters S with a minus")
    flip: bool = Field(False, description="outcome of b is read inverted")


class NoClickDocument(_In):
    a: Bit | None = None
    b: Bit | None = None


class OutputDocument(_In):
    rule: OutputRule
    bits: int = Field(ge=1, description="fixed: exactly that many or a refusal; credit: at most that many")


class TableDocument(_In):
    test: list[float] = Field(min_length=16, max_length=16,
                              description="credits of the test cells, bits, index 8x+4y+2a+b")
    generation: list[float] = Field(min_length=4, max_length=4,
                                    description="credits of the generation cells, index 2a+b")


class AcceptanceDocument(_In):
    count: Literal["wins", "losses"]
    limit: int = Field(ge=0)
    tangent: float


class CalibrationDocument(_In):
    digest: str = Field(pattern=DIGEST)
    rounds: int | None = None


class DeclarationDocument(_In):
    """What is fixed before the rounds exist. Made by `bellassay declare`, or by hand."""

    format: Literal["bellassay declaration 1"]
    rig: str = Field(min_length=1, max_length=200)
    purpose: str = Field("", max_length=200)
    rounds: int = Field(ge=1)
    settings: SettingsDocument
    convention: ConventionDocument = Field(default_factory=ConventionDocument)
    no_click: NoClickDocument = Field(default_factory=NoClickDocument)
    method: Method
    order: float | None = None
    soundness: float = Field(gt=0, lt=1)
    output: OutputDocument
    table: TableDocument | None = None
    acceptance: AcceptanceDocument | None = None
    disclosure: Disclosure = "confidential"
    seed_source: Literal["system", "upload"] = "system"
    expected_score: float | None = None
    calibration: CalibrationDocument | None = None
    model_config = ConfigDict(strict=True, extra="forbid", json_schema_extra={"examples": [{
        "format": "bellassay declaration 1", "rig": "north table", "purpose": "beacon of week 19",
        "rounds": 100_000_000,
        "settings": {"test_probability": 1.0, "distribution": [0.25, 0.25, 0.25, 0.25], "generation": [0, 0],
                     "bias": 0.0},
        "convention": {"minus": [1, 1], "flip": False}, "no_click": {"a": 0, "b": 0}, "method": "eat-2018",
        "order": None,
        "soundness": 1e-10, "output": {"rule": "fixed", "bits": 20_000_000}, "table": None,
        "acceptance": {"count": "wins", "limit": 84_990_000, "tangent": 0.8497}, "disclosure": "confidential",
        "seed_source": "system", "expected_score": 0.85, "calibration": None}]})


class RecordedDeclaration(_Out):
    id: str
    digest: str
    time: str
    ledger_index: int
    declaration: DeclarationDocument


class Declarations(_Out):
    declarations: list[RecordedDeclaration]
    next: str | None = Field(description="address of the next page, null on the last one")


# ---- runs

class NewRun(_In):
    declaration: str = Field(min_length=1, max_length=64, description="id of a recorded declaration")
    model_config = ConfigDict(strict=True, extra="forbid",
                              json_schema_extra={"examples": [{"declaration": "d3f0a91c5b7e2468d"}]})


class Sealed(_Out):
    segments: int
    rounds: int
    time: str


class SeedState(_Out):
    source: str | None
    bits_needed: int | None = Field(description="known once the certificate is made")
    received: bool


_RUN = {
    "id": "r5ce1a7d02b94e683", "declaration": "d3f0a91c5b7e24680", "state": "working", "stage": "hash",
    "fraction": 0.42,
    "eta_s": 71.5, "message": "", "created": TIME, "segments_received": 12, "rounds_received": 100_000_000,
    "sealed": {"segments": 12, "rounds": 100_000_000, "time": TIME}, "certified_length": 20_000_000,
    "available_bits": 20_410_077,
    "seed": {"source": "system", "bits_needed": 219_999_999, "received": True}, "waiting_for": None, "score": None,
    "diagnostics": None,
    "stage_seconds": {"tally": 1.9, "certify": 0.1, "seed": 0.4}, "finished": None, "collected": None, "erased": None,
    "links": {"self": "/v1/runs/r5ce1a7d02b94e683"}}


class Run(_Out):
    """A run as it is now."""

    id: str
    declaration: str
    state: State
    stage: Stage | None = Field(description="what is being done, while working")
    fraction: float = Field(ge=0, le=1, description="of the stage")
    eta_s: float | None = Field(description="seconds the stage still takes, if known")
    message: str = Field(description="why a run was refused or failed")
    created: str
    segments_received: int
    rounds_received: int
    sealed: Sealed | None
    certified_length: int | None = Field(description="bits; 0 if refused")
    available_bits: int | None = Field(description="credit and penalty added up; may be negative")
    seed: SeedState
    waiting_for: Literal["seed"] | None
    score: dict[str, Any] | None = Field(description="correlators, S, winning probability, p-values")
    diagnostics: list[dict[str, Any]] | None
    stage_seconds: dict[str, float]
    finished: str | None
    collected: str | None
    erased: str | None
    links: dict[str, str]
    model_config = ConfigDict(extra="forbid", json_schema_extra={"examples": [_RUN]})


class Runs(_Out):
    runs: list[Run]
    next: str | None = Field(description="address of the next page, null on the last one")


class CellCount(_Out):
    t: Bit
    x: Bit
    y: Bit
    a: Bit
    b: Bit
    n: int


class Segment(_Out):
    """A segment as it was received."""

    segment: int
    digest: str = Field(description="SHA-256 of the file")
    bytes: int
    format: str
    rounds: int
    planes_digest: str = Field(description="digest of the rounds, whatever file they came in")
    first_round: int | None
    last_round: int | None
    no_clicks: list[int] = Field(description="outcomes on a and on b that took the declared no-click value")
    file_name: str | None
    received: str
    tally: list[CellCount]


class Segments(_Out):
    segments: list[Segment]
    rounds: int


class SealRequest(_In):
    segments: int = Field(ge=1)
    rounds: int = Field(ge=1)
    model_config = ConfigDict(strict=True, extra="forbid",
                              json_schema_extra={"examples": [{"segments": 12, "rounds": 100_000_000}]})


class SeedReceipt(_Out):
    bits: int
    digest: str
    model_config = ConfigDict(extra="forbid",
                              json_schema_extra={"examples": [{"bits": 219_999_999, "digest": EXAMPLE_DIGEST}]})


class CollectionRequest(_In):
    digest: str = Field(pattern=DIGEST, description="SHA-256 of the bits as received")
    model_config = ConfigDict(strict=True, extra="forbid", json_schema_extra={"examples": [{"digest": EXAMPLE_DIGEST}]})


class Collection(_Out):
    collected: str = Field(description="when")
    ledger_index: int
    model_config = ConfigDict(extra="forbid", json_schema_extra={"examples": [{"collected": TIME, "ledger_index": 77}]})


# ---- planning

class CellIn(_In):
    t: Bit = 1
    x: Bit
    y: Bit
    a: Bit
    b: Bit
    n: int = Field(ge=0, le=2**50)


class RigModel(_In):
    """A photon-pair rig at its best state and angles."""

    visibility: float = Field(1.0, ge=0, le=1)
    efficiency: float = Field(1.0, ge=0, le=1, description="of both sides")
    pair_probability: float = Field(1.0, gt=0, le=1, description="of a pair in a round")
    dark_counts: float = Field(0.0, ge=0, le=1, description="probability of a dark count per side and round")


class PlanRequest(_In):
    """Rounds or a wanted length (one of them), and an expected score, a calibration tally or a modelled rig (one of
    them)."""

    rounds: int | None = Field(None, ge=1, le=2**50)
    length: int | None = Field(None, ge=1, le=2**50, description="bits; the plan then says how many rounds they take")
    score: float | None = Field(None, description="expected winning probability, between 0.75 and 0.853553")
    calibration: list[CellIn] | None = Field(None, max_length=32, description="counts of earlier rounds")
    rig: RigModel | None = None
    convention: ConventionDocument = Field(default_factory=ConventionDocument)
    settings: SettingsDocument = Field(default_factory=SettingsDocument)
    soundness: float = Field(gt=0, lt=1)
    method: Method | None = Field(None, description="all of them if left out")
    output_rule: OutputRule = "fixed"
    disclosure: Disclosure = "confidential"
    order: float | None = None
    confidence: float = Field(0.99, gt=0, lt=1)
    model_config = ConfigDict(strict=True, extra="forbid", json_schema_extra={
        "examples": [{"rounds": 100_000_000, "score": 0.8, "soundness": 1e-10}]})


class NotApplicable(_Out):
    method: Method
    code: str
    detail: str


class Plans(_Out):
    score: float
    plans: list[dict[str, Any]] = Field(description="per method: certified_length, reliable_length, order, rate, "
                                                    "penalty_bits, limit_rate, seed_bits, ...")
    not_applicable: list[NotApplicable]


# ---- ledger and operation

class LedgerEntry(_Out):
    index: int
    entry: dict[str, Any] = Field(description="the entry; its leaf is hashed over the RFC 8785 bytes of this object")
    leaf_hash: str = Field(description="RFC 9162 leaf hash, base64")


class LedgerEntries(_Out):
    size: int = Field(description="entries in the ledger")
    start: int
    entries: list[LedgerEntry]


class LedgerProof(_Out):
    kind: Literal["inclusion", "consistency"]
    size: int
    index: int | None = None
    old: int | None = None
    hashes: list[str] = Field(description="base64, in the order of RFC 9162")


class Health(_Out):
    status: str
    model_config = _example({"status": "ready"})
