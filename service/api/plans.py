"""/v1/plan: what a run may be expected to give, without any run."""

from __future__ import annotations

import threading
from typing import Any

from fastapi import APIRouter

from extractor import pipeline
from extractor.documents import tally_from
from extractor.entropy.planning import score_of
from extractor.errors import InputError
from extractor.model import METHODS, Convention, Settings
from service.api import schemas
from service.api.auth import Anybody
from service.api.bodies import StrictRoute
from service.api.problems import documented
from service.errors import Unavailable

router = APIRouter(prefix="/v1/plan", tags=["planning"], route_class=StrictRoute)
# Planning takes a processor for seconds: it must not take them all.
_ROOM, WAIT_S = threading.BoundedSemaphore(2), 10.0
_ALWAYS_WRONG = ("score-out-of-range", "out-of-range", "bad-number", "bad-settings")      # whatever the method


@router.post("", response_model=schemas.Plans, operation_id="plan",
             summary="Expected certified length, or the rounds a length needs",
             responses=documented(400, 401, 415, 422, 503))
def plan(body: schemas.PlanRequest, identity: Anybody) -> Any:
    """With `rounds`: what they may be expected to certify, per method. With `length`: how many rounds that takes."""
    if (body.rounds is None) == (body.length is None):
        raise InputError("give either rounds or length", code="bad-usage", field="/rounds")
    if (body.score is None) == (body.calibration is None):
        raise InputError("give either score or calibration", code="bad-usage", field="/score")
    s = body.settings
    settings = Settings(s.test_probability, tuple(s.distribution), tuple(s.generation), s.bias)
    common = dict(score=_score(body), settings=settings, soundness=body.soundness, output_rule=body.output_rule,
                  disclosure=body.disclosure, order=body.order, confidence=body.confidence)
    if not _ROOM.acquire(timeout=WAIT_S):
        raise Unavailable("others are planning; try again", code="planning-busy", retry_after_s=WAIT_S)
    try:
        plans, others = _plans(body, common)
    finally:
        _ROOM.release()
    return {"score": common["score"], "plans": plans, "not_applicable": others}


def _plans(body: schemas.PlanRequest, common: dict[str, Any]) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
    """A plan per method, and why the others do not apply."""
    plans, others = [], []
    for method in (body.method,) if body.method else METHODS:
        try:
            rounds = body.rounds or pipeline.rounds_for(body.length, method=method, **common)
            plans.append(pipeline.plan(rounds=rounds, method=method, **common).document())
        except InputError as fault:
            if body.method or fault.code in _ALWAYS_WRONG:
                raise
            others.append({"method": method, "code": fault.code, "detail": str(fault)})
    return plans, others


def _score(body: schemas.PlanRequest) -> float:
    if body.calibration is None:
        return body.score
    tally = tally_from([cell.model_dump() for cell in body.calibration], "/calibration")
    return score_of(tally, Convention(tuple(body.convention.minus), body.convention.flip))
