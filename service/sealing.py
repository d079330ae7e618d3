"""Sealing a run: no more rounds, everything received is fixed in the ledger, the job may begin."""

from __future__ import annotations

from collections.abc import Sequence

from extractor.seal.entries import records_commitment
from service.clock import now_text
from service.errors import Conflict
from service.jobs import states
from service.parts import Parts
from service.store.contracts import RunRow, SegmentRow

NAMED = 50              # places listed one by one in an error


def seal(parts: Parts, run_id: str, segments: int, rounds: int) -> RunRow:
    """Seals the run if exactly these numbers arrived, and says so in the ledger; the same call again changes nothing.

    Errors raised: Conflict "segments-missing", "segments-differ", "rounds-differ", "missing-round", "repeated-round",
    "seal-differs" (sealed before with other numbers).
    """
    with parts.store.write() as transaction:
        row = transaction.get_run(run_id)
        if row.state != "open":
            if (row.sealed_segments, row.sealed_rounds) != (segments, rounds):
                raise Conflict(f"the run was sealed with {row.sealed_segments} segments and {row.sealed_rounds} rounds",
                               code="seal-differs")
            return row
        received = transaction.list_segments(run_id)
        _check(received, segments, rounds)
        now = parts.ledger.time(transaction, now_text())
        declaration = transaction.get_declaration(row.declaration_id)
        states.move(transaction, row, "sealed", {"sealed_segments": segments, "sealed_rounds": rounds,
                                                 "sealed_time": now})
        parts.ledger.append(transaction, "seal", run_id, {
            "declaration": declaration.digest, "segments": segments, "rounds": rounds,
            "records_commitment": records_commitment(row.ledger_salt, [one.planes_digest for one in received])}, now)
        return transaction.get_run(run_id) or row


def _check(received: Sequence[SegmentRow], segments: int, rounds: int) -> None:
    numbers = {segment.number for segment in received}
    missing = [number for number in range(1, segments + 1) if number not in numbers]
    if missing:
        named = ", ".join(map(str, missing[:NAMED]))
        more = f" and {len(missing) - NAMED} more" if len(missing) > NAMED else ""
        raise Conflict(f"of {segments} segments {len(missing)} have not arrived: {named}{more}",
                       code="segments-missing", errors=tuple(_missing(number) for number in missing[:NAMED]))
    if len(numbers) != segments:
        raise Conflict(f"{len(numbers)} segments arrived, the highest is {max(numbers)}; the seal names {segments}",
                       code="segments-differ",
                       errors=({"pointer": "/segments", "detail": f"{len(numbers)} arrived"},))
    total = sum(segment.rounds for segment in received)
    if total != rounds:
        raise Conflict(f"{total} rounds arrived, the seal names {rounds}", code="rounds-differ",
                       errors=({"pointer": "/rounds", "detail": f"{total} arrived"},))
    for before, after in zip(received, received[1:]):
        _check_continuous(before, after)


def _missing(number: int) -> dict[str, str]:
    return {"pointer": "/segments", "field": str(number), "detail": f"segment {number} has not arrived"}


def _check_continuous(before: SegmentRow, after: SegmentRow) -> None:
    """Round numbers, where both segments carry them, must run on."""
    if before.last_round is None or after.first_round is None or after.first_round == before.last_round + 1:
        return
    code = "missing-round" if after.first_round > before.last_round + 1 else "repeated-round"
    detail = (f"segment {after.number} starts with round {after.first_round}, "
              f"segment {before.number} ended with round {before.last_round}")
    raise Conflict(detail, code=code, errors=(
        {"pointer": "/segments", "detail": detail, "file": after.file_name, "row": 1, "field": "round"},))
