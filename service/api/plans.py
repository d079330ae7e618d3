"""/v1/plan: what a run may be expected to give, without any run."""

from __future__ import annotations

import threading
from typing import Any

from fastapi import APIRouter

from extractor import pipeline
from extractor.bell.rigs import optimal_rig
from extractor.documents import tally_from
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
    if [body.score, body.calibration, body.rig].count(None) != 2:
        raise InputError("give exactly one of score, calibration and rig", code="bad-usage", field="/score")
    s = body.settings
    settings = Settings(s.test_probability, tuple(s.distribution), tuple(s.generation), s.bias)
    common = dict(**_expectation(body, settings), settings=settings, convention=_convention(body),
            soundness=body.soundness, output_rule=body.output_rule,
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
            only_here = fault.code == "score-out-of-range" and body.score is None
            if body.method or fault.code in _ALWAYS_WRONG and not only_here:
                raise
            others.append({"method": method, "code": fault.code, "detail": str(fault)})
    return plans, others


def _convention(body: schemas.PlanRequest) -> Convention:
    return Convention(tuple(body.convention.minus), body.convention.flip)


def _expectation(body: schemas.PlanRequest, settings: Settings) -> dict[str, Any]:
    """Score and behaviour, as `pipeline.plan` takes them."""
    if body.calibration is not None:
        tally = tally_from([cell.model_dump() for cell in body.calibration], "/calibration")
        return pipeline.expect(calibration=tally, convention=_convention(body))
    if body.rig is None:
        return pipeline.expect(score=body.score)
    r = body.rig
    return pipeline.expect(model=optimal_rig(
        r.efficiency, r.pair_probability, r.visibility, settings=settings, convention=_convention(body),
        dark_counts=(r.dark_counts,) * 2), convention=_convention(body))
