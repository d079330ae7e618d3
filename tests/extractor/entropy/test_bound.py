"""Certificates: every term listed, rounded against us, and refusals that say what was missing."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from decimal import Decimal

import pytest

from extractor import documents
from extractor.entropy import bound, lengths, numerics, planning
from extractor.errors import InputError
from extractor.model import METHODS, Convention, Settings, Tally, cell_index

COMMON = dict(rig="Wren bench", rounds=10**6, soundness=1e-9, score=0.80)


def declared(method="factor-closed", **changes):
    return planning.declare(method=method, **(COMMON | changes))


def honest(declaration, score=0.80):
    return planning._expected(declaration, score, 0.5)


def test_terms_add_up_to_the_available_bits():
    """The listed terms, each rounded down, add up to the available bits within the rounding of the terms."""
    for method in METHODS:
        c = bound.certify(declared(method), honest(declared(method)))
        assert c.outcome == "certified"
        assert 0 <= math.fsum(t.bits for t in c.terms) - c.available_bits < 1 + 1e-6
        assert c.certified_length <= c.available_bits


def test_credit_is_the_sum_over_cells():
    """The credit term equals rounds times credit over the listed cells, which cover the whole tally."""
    d = declared(settings=Settings(0.3, generation=(1, 1)))
    c = bound.certify(d, honest(d))
    assert math.fsum(k.rounds * k.credit_bits for k in c.cells) == pytest.approx(c.terms[0].bits, rel=1e-12)
    assert sum(k.rounds for k in c.cells) == c.rounds
    assert {(k.x, k.y) for k in c.cells if k.t == 0} == {(1, 1)}


def test_soundness_term_is_the_published_one():
    """The penalty for soundness is order/(order-1) log2(1/eps), and the hash constant is +2 (arXiv:2105.05342)."""
    d = declared(order=1.25)
    terms = {t.name: t.bits for t in bound.certify(d, honest(d)).terms}
    assert terms["soundness"] == pytest.approx(-5 * -math.log2(1e-9), rel=1e-14)
    assert terms["hash constant"] == 2


@pytest.mark.parametrize("order", ["1.0001", "1.3", "2"])
def test_length_formula_solves_the_leftover_hash_bound(order):
    """1/2 2^(2/a-1) 2^(((a-1)/a)(length - H)) = eps at length = H - (a/(a-1)) log2(1/eps) + 2; a = 2 is the collision bound."""
    with numerics.exactly():
        a, eps, entropy = Decimal(order), Decimal("1e-6"), Decimal(5000)
        length = entropy - lengths.renyi_hash_cost(eps, a) + 2
        distance = numerics.exp2(2 / a - 2 + (a - 1) / a * (length - entropy))
        assert abs(distance / eps - 1) < Decimal("1e-40")
        if a == 2:
            assert abs(distance - numerics.exp2((length - entropy) / 2 - 1)) < Decimal("1e-40")


def test_smooth_hash_cost_is_the_leftover_hash_lemma():
    """1/2 sqrt(2^(length - H)) = eps_h at length = H - 2 log2(1/(2 eps_h)) (arXiv:1002.2436), and the three errors fit the soundness."""
    with numerics.exactly():
        smoothing, acceptance, hashing = lengths.eat_errors(1e-6)
        assert numerics.exp2(hashing) + 2 * numerics.exp2(smoothing) <= Decimal(1e-6) * (1 + Decimal("1e-50"))
        assert numerics.exp2(acceptance) <= Decimal(1e-6) * (1 + Decimal("1e-50"))
        cost = lengths.smooth_hash_cost(hashing)
        assert abs(numerics.exp2(-cost / 2 - 1) - numerics.exp2(hashing)) < Decimal("1e-40")


def test_too_little_is_refused_with_the_numbers():
    """A run below its declared length ends refused, with zero bits, no seed and a reason naming both lengths."""
    d = declared()
    c = bound.certify(d, honest(d, 0.79))
    assert (c.outcome, c.certified_length, c.seed_bits) == ("refused", 0, 0)
    assert str(c.available_bits) in c.reason and str(d.output_bits) in c.reason


def test_length_from_credit_pays_for_its_lengths():
    """With a length from credit, log2 of the largest length (and one bit, see class_bits) is taken off and all the rest is certified."""
    d = declared(output_rule="credit", output_bits=2**20)
    c = bound.certify(d, honest(d))
    assert {t.name: t.bits for t in c.terms}["classes"] == pytest.approx(-21, abs=1e-9)
    assert c.certified_length == c.available_bits > 0
    capped = bound.certify(replace(d, output_bits=1000), honest(d))
    assert capped.certified_length == 1000
    poor = bound.certify(d, honest(d, 0.70))
    assert poor.outcome == "refused" and "nothing can be certified" in poor.reason


def test_public_disclosure_is_paid_for():
    """A declaration that lets the certificate be published pays for every tally, no-click count and digest there could be."""
    for method in METHODS:
        d = declared(method)
        private = bound.certify(d, honest(d)).available_bits
        public = bound.certify(replace(d, disclosure="public"), honest(d)).available_bits
        ways = math.log2(math.comb(10**6 + 16, 16)) + 2 * math.log2(10**6 + 1) + 512 - (method == "factor-closed")
        assert private - public == pytest.approx(ways, abs=1.5)


def test_stopping_early():
    """A shorter run: factor-closed certifies what there is (raw string still of the declared length), the eat methods refuse."""
    d = declared(output_rule="credit")
    half = Tally(tuple(n // 2 for n in honest(d).counts))
    c = bound.certify(d, half)
    assert c.outcome == "certified" and c.raw_bits == 2 * 10**6 and c.rounds < d.rounds
    assert any("stopped after" in line for line in c.assumptions)
    full = {t.name: t.bits for t in bound.certify(d, honest(d)).terms}["classes"]
    assert full - {t.name: t.bits for t in c.terms}["classes"] == pytest.approx(math.log2(10**6))      # where it stopped becomes known
    for method in ("eat-2018", "eat-2019"):
        e = declared(method)
        c = bound.certify(e, Tally(tuple(n // 2 for n in honest(e).counts)))
        assert c.outcome == "refused" and "declared rounds" in c.reason


def test_thresholds_of_the_eat_methods():
    """One won round below, or one lost round above, the declared limit is a refusal; exactly at it is not."""
    for method in ("eat-2018", "eat-2019"):
        d = declared(method)
        tally, limit = honest(d, 0.8), d.acceptance.limit
        counts = list(tally.counts)
        win, lose = cell_index(1, 0, 0, 0, 0), cell_index(1, 0, 0, 0, 1)
        lost = sum(n for i, n in enumerate(counts) if i >= 16 and not d.convention.wins(i >> 3 & 1, i >> 2 & 1, i >> 1 & 1, i & 1))
        excess = (d.rounds - lost - limit) if method == "eat-2018" else limit - lost
        counts[win] -= excess
        counts[lose] += excess
        assert bound.certify(d, Tally(tuple(counts))).outcome == "certified"
        counts[win] -= 1
        counts[lose] += 1
        refused = bound.certify(d, Tally(tuple(counts)))
        assert refused.outcome == "refused" and "threshold" in refused.reason


def test_tallies_that_cannot_belong_are_bad_input():
    """More rounds than declared, or generation rounds that were not declared, are the caller's mistake, not a refusal."""
    d = declared()
    counts = list(honest(d).counts)
    counts[16] += 1
    with pytest.raises(InputError, match="1000001 rounds"):
        bound.certify(d, Tally(tuple(counts)))
    counts[16] -= 2
    counts[0] += 1
    with pytest.raises(InputError, match="generation"):
        bound.certify(d, Tally(tuple(counts)))
    g = declared(settings=Settings(0.5, generation=(0, 1)))
    with pytest.raises(InputError, match="settings"):
        bound.certify(g, Tally((1,) + (0,) * 31))


def test_methods_say_what_they_do_not_cover():
    """The eat methods refuse non-uniform or biased settings and a length from credit, naming the way out."""
    for method in ("eat-2018", "eat-2019"):
        for changes in (dict(settings=Settings(bias=0.01)), dict(settings=Settings(distribution=(0.26, 0.24, 0.25, 0.25))), dict(output_rule="credit")):
            with pytest.raises(InputError, match="factor-closed"):
                declared(method, **changes)
    with pytest.raises(InputError, match="stop varying"):
        declared(settings=Settings(distribution=(0.05, 0.45, 0.05, 0.45), bias=0.2))


def test_a_settings_bias_costs_bits():
    """A declared bias lowers the certified length, more so when larger; the numbers name the bound and the slack."""
    available = []
    for bias in (0.0, 1e-5, 1e-4, 1e-3):
        d = declared(settings=Settings(bias=bias), output_bits=1)
        c = bound.certify(d, honest(d))
        available.append(c.available_bits)
        assert c.numbers["validity_bound"] >= 1 - 1e-12
    assert available == sorted(available, reverse=True) and available[0] > available[-1]


def test_convention_decides_what_is_a_win():
    """Relabelled data under the matching convention certify the same number; under another they do not."""
    d = declared()
    flipped = replace(d, convention=Convention((1, 1), True), table=declared(convention=Convention((1, 1), True)).table)
    counts = [0] * 32
    for i, n in enumerate(honest(d).counts):
        counts[i ^ 1] = n
    assert bound.certify(flipped, Tally(tuple(counts))).available_bits == bound.certify(d, honest(d)).available_bits
    assert bound.certify(flipped, honest(d)).outcome == "refused"


def test_certificates_do_not_depend_on_the_callers_arithmetic():
    """A strange decimal context of the caller changes no byte of the certificate."""
    import decimal
    d = declared(settings=Settings(0.2, bias=1e-4))
    plain = documents.certificate_document(bound.certify(d, honest(d)))
    with decimal.localcontext() as context:
        context.prec, context.rounding = 5, decimal.ROUND_UP
        strange = documents.certificate_document(bound.certify(d, honest(d)))
    assert json.dumps(plain) == json.dumps(strange)


def test_documents_round_trip():
    """Declaration and certificate survive their documents unchanged."""
    for method in METHODS:
        d = declared(method, rounds=10**8, settings=Settings(0.25, generation=(1, 0)), calibration_digest="sha256:" + "0" * 64, calibration_rounds=5)
        assert documents.declaration_from(json.loads(json.dumps(documents.declaration_document(d)))) == d
        c = bound.certify(d, honest(d))
        assert documents.certificate_from(json.loads(json.dumps(documents.certificate_document(c)))) == c


@pytest.mark.parametrize("value", ["0.1", "-0.1", "1e-300", "123456789.123456789", "-7", "9007199254740993"])
def test_floats_are_rounded_the_safe_way(value):
    """down never exceeds, up never falls short."""
    exact = Decimal(value)
    assert Decimal(numerics.down(exact)) <= exact <= Decimal(numerics.up(exact))
