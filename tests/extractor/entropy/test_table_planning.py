"""factor-table from calibration or model to certificate: what is planned is what an honest run gets."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from extractor import documents, pipeline
from extractor.bell.rigs import Rig, optimal_rig, simulate_many, simulate_tally
from extractor.entropy import behaviours, bound, planning, table_making
from extractor.errors import InputError
from extractor.model import Convention, Declaration, Settings, Tally
from extractor.seal import canonical, table_check
from tests.published.counts import DELFT_2015, VIENNA_2015, tally_of

COMMON = dict(rounds=10**6, soundness=1e-6, method="factor-table")


def test_monte_carlo_of_the_planned_lengths():
    """3000 simulated runs reach the lengths planned at 50, 90 and 99 % about that often, and twice the closed form's
    length."""
    rig = Rig(visibility=0.93)
    plan = pipeline.plan(**pipeline.expect(model=rig), **COMMON)
    credits = np.array(plan.table["test"])
    earned = simulate_many(rig, COMMON["rounds"], 3000, seed=4)[:, 16:] @ credits - plan.penalty_bits
    for chance in (0.5, 0.9, 0.99):
        share = float(np.mean(earned >= plan.reached[f"{chance:g}"]))
        assert abs(share - chance) < 4 * np.sqrt(chance * (1 - chance) / 3000) + 0.003
    closed = pipeline.plan(score=rig.winning_probability, **(COMMON | {"method": "factor-closed"}))
    assert plan.certified_length > 1.7 * closed.certified_length
    assert 0.9 < plan.limit_fraction < 1 and plan.rate < plan.limit_rate


def test_a_declaration_from_calibration_certifies_and_verifies():
    """Calibration rounds make a declaration; later rounds of the same rig are certified; the second check agrees;
    bytes repeat."""
    rig = optimal_rig(0.9, visibility=0.99)
    declaration = pipeline.declare(rig="dim bench", calibration=simulate_tally(rig, 10**6, seed=1),
            output_rule="credit", **COMMON)
    document = documents.declaration_document(declaration)
    assert documents.declaration_from(document) == declaration and table_check.table_holds(document)
    tally = simulate_tally(rig, 10**6, seed=2)
    certificate = pipeline.certify(declaration, tally)
    assert certificate.outcome == "certified" and certificate.method == "factor-table"
    planned = pipeline.plan(**pipeline.expect(model=rig), **COMMON).certified_length
    assert abs(certificate.certified_length - planned) < 0.1 * planned
    again = documents.certificate_document(pipeline.certify(documents.declaration_from(document), tally))
    assert canonical.canonical_bytes(again) == canonical.canonical_bytes(documents.certificate_document(certificate))
    greedy = document | {"table": {"test": [c + 0.05 for c in document["table"]["test"]],
            "generation": document["table"]["generation"]}}
    assert not table_check.table_holds(greedy)
    with pytest.raises(InputError, match="valid"):
        pipeline.certify(documents.declaration_from(greedy), tally)


def test_boxes_without_entanglement_earn_nothing():
    """Under a certified table the credit of the best local strategy is negative on average: its factor has mean at
    most 1."""
    plan = pipeline.plan(score=0.8, **COMMON)
    e, credits = plan.order - 1, np.array(plan.table["test"]).reshape(2, 2, 2, 2)
    for s in range(16):
        chosen = [credits[x, y, s >> x & 1, s >> (2 + y) & 1] for x in (0, 1) for y in (0, 1)]
        assert np.mean(2 ** (e * np.array(chosen))) <= 1


def test_calibrations_are_projected_onto_the_quantum_set():
    """The behaviour of a calibration signals nothing, stays within Tsirelson's bound and fits the counts."""
    for table in (DELFT_2015, VIENNA_2015):
        tally = tally_of(table)
        behaviour = behaviours.of_tally(tally)
        assert np.allclose(behaviour.sum(axis=3)[:, 0], behaviour.sum(axis=3)[:, 1], atol=1e-9)
        assert np.allclose(behaviour.sum(axis=2)[0], behaviour.sum(axis=2)[1], atol=1e-9)
        assert np.all(behaviour > 0)
        counts = tally.test_counts()
        observed = np.maximum(counts / counts.sum(axis=(2, 3), keepdims=True), 1e-300)
        assert 2 * float(np.sum(counts * np.log(observed / behaviour))) < 25        # chi-square of 8 degrees of freedom and a margin
    perfect = [0] * 32
    for x, y, a, b in np.ndindex(2, 2, 2, 2):
        perfect[16 + 8 * x + 4 * y + 2 * a + b] = 1000 if Convention().wins(x, y, a,
                b) else 0      # S = 4: beyond quantum
    p = behaviours.of_tally(Tally(tuple(perfect)))
    wins = sum(p[x, y, a, b] for x, y, a, b in np.ndindex(2, 2, 2, 2) if Convention().wins(x, y, a, b)) / 4
    assert wins <= 0.853554


def test_published_photon_counts_as_a_yardstick():
    """Giustina et al., PRL 115, 250401 (2015): a table found on the counts credits at least 1.25e5 bits at 1e-6
    (prototype figure; no certificate)."""
    tally = tally_of(VIENNA_2015)
    plan = pipeline.plan(**pipeline.expect(calibration=tally), rounds=tally.rounds, soundness=1e-6,
            method="factor-table", order=1.0007)
    assert plan.certified_length >= 1.25e5
    assert plan.validity_bound <= 1


def test_spot_checks_with_generation_rounds():
    """With one test in five rounds the generation rounds carry credit, and a run of the rig reaches what was
    planned."""
    settings = Settings(0.2, generation=(0, 1))
    rig = Rig(visibility=0.97, settings=settings)
    declaration = pipeline.declare(rig="wren", model=rig, settings=settings, output_rule="credit", order=1.001,
            **COMMON)
    assert max(declaration.table.generation) > 0
    certificate = pipeline.certify(declaration, simulate_tally(rig, 10**6, seed=3))
    assert certificate.certified_length > 0.5 * 10**6


def test_losses_are_capped():
    """No cell of a table made for a dim rig costs more than 2 % of the rounds or 100 bits."""
    plan = pipeline.plan(**pipeline.expect(model=optimal_rig(0.8, 0.01)), rounds=10**7, soundness=1e-6,
            method="factor-table", order=1.002)
    assert min(plan.table["test"]) > -0.05 * 10**7


@pytest.mark.parametrize("order", [1.3, 1.6, 2.0])
def test_the_second_check_agrees_at_large_orders(order):
    """Tables made for orders far from 1 pass the auditor's check too, and are refused by both with a little more credit."""
    made = table_making.make_table(planning._of_score(0.84, Convention()), Settings(), 1000, 0.1, order)
    for extra, holds in ((0.0, True), (0.01, False)):
        table = replace(made.table, test=tuple(c + extra for c in made.table.test))
        declaration = Declaration(rig="Wren bench", rounds=1000, method="factor-table", soundness=0.1, output_rule="credit", output_bits=2000,
                                  order=order, table=table)
        assert table_check.table_holds(documents.declaration_document(declaration)) == holds
        if holds:
            bound.check_declaration(declaration)
        else:
            with pytest.raises(InputError):
                bound.check_declaration(declaration)
