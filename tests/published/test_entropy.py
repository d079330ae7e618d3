"""One-round entropies against the published formulas and their values."""

from __future__ import annotations

from decimal import Decimal

import pytest

from extractor.entropy import single_round
from extractor.entropy.numerics import SQRT2, TSIRELSON_SCORE, exactly

# S, von Neumann 1 - h(q), min-entropy 1 - log2(1 + sqrt(2 - S^2/4)), evaluated from the published formulas:
# Acin et al., PRL 98, 230501 (2007) and Pironio et al., New J. Phys. 11, 045021 (2009);
# Pironio et al., Nature 464, 1021 (2010) and Masanes, Pironio, Acin, Nat. Commun. 2, 238 (2011).
ONE_SIDED = [
    ("2.0", 0.0, 0.0),
    ("2.1", 0.075256057, 0.038476856),
    ("2.2", 0.157288001, 0.082515203),
    ("2.3", 0.24710243, 0.13360323),
    ("2.4", 0.346112436, 0.194021259),
    ("2.5", 0.456435557, 0.267567693),
    ("2.6", 0.581579931, 0.361438222),
    ("2.7", 0.728482125, 0.492781296),
    ("2.75", 0.81504725, 0.58779414),
    ("2.8", 0.918531085, 0.736965594),
]

# S, order, "up-arrow", "down-arrow" Rényi entropies, evaluated from the closed forms of Hahn, Philip, Tan, Brown 2025
# (arXiv:2507.07365; formula derived here, table recomputed).
RENYI = [
    ("2.1", "1.01", 0.074557, 0.074550), ("2.1", "1.1", 0.069281, 0.068735), ("2.1", "1.5", 0.057135, 0.050970), ("2.1", "2", 0.050970, 0.038477),
    ("2.2", "1.01", 0.155916, 0.155903), ("2.2", "1.1", 0.145502, 0.144416), ("2.2", "1.5", 0.121084, 0.108473), ("2.2", "2", 0.108473, 0.082515),
    ("2.4", "1.01", 0.343577, 0.343552), ("2.4", "1.1", 0.324000, 0.321926), ("2.4", "1.5", 0.275894, 0.249884), ("2.4", "2", 0.249884, 0.194021),
    ("2.6", "1.01", 0.578454, 0.578423), ("2.6", "1.1", 0.553683, 0.550993), ("2.6", "1.5", 0.488079, 0.449847), ("2.6", "2", 0.449847, 0.361438),
    ("2.8", "1.01", 0.917022, 0.917007), ("2.8", "1.1", 0.904163, 0.902667), ("2.8", "1.5", 0.861569, 0.830312), ("2.8", "2", 0.830312, 0.736966),
]


def score_of(chsh: str) -> Decimal:
    return (Decimal(chsh) + 4) / 8


@pytest.mark.parametrize("chsh, von_neumann, min_entropy", ONE_SIDED)
def test_one_sided_entropies_match_the_published_formulas(chsh, von_neumann, min_entropy):
    """Both one-sided entropies reproduce the published functions of S."""
    with exactly():
        assert float(single_round.von_neumann(score_of(chsh))) == pytest.approx(von_neumann, abs=1e-8)
        assert float(single_round.min_entropy(score_of(chsh))) == pytest.approx(min_entropy, abs=1e-8)


def test_one_bit_at_the_tsirelson_bound():
    """At S = 2 sqrt 2 every one-sided entropy is one bit (Tsirelson 1980: the outcome is then uncorrelated with anything)."""
    with exactly():
        top = (2 * SQRT2 + 4) / 8
        assert abs(single_round.von_neumann(top) - 1) < Decimal("1e-25")
        assert abs(single_round.min_entropy(top) - 1) < Decimal("1e-25")
        assert single_round.von_neumann(TSIRELSON_SCORE) <= 1


@pytest.mark.parametrize("chsh, order, up, down", RENYI)
def test_renyi_entropies_match_the_table(chsh, order, up, down):
    """The Rényi entropies reproduce the table of both arrow forms."""
    with exactly():
        assert float(single_round.renyi_entropy(score_of(chsh), Decimal(order))) == pytest.approx(down, abs=6e-7)
        assert float(single_round.renyi_entropy_up(score_of(chsh), Decimal(order))) == pytest.approx(up, abs=6e-7)


@pytest.mark.parametrize("chsh", [row[0] for row in ONE_SIDED[1:]])
def test_limits_join_the_families(chsh):
    """Order -> 1 gives the von Neumann bound; the down-arrow form at 2, and the up-arrow form at infinity, give min-entropy."""
    with exactly():
        w = score_of(chsh)
        assert abs(single_round.renyi_entropy(w, Decimal("1.00000001")) - single_round.von_neumann(w)) < Decimal("1e-7")
        assert abs(single_round.renyi_entropy(w, Decimal(2)) - single_round.min_entropy(w)) < Decimal("1e-40")
        assert abs(single_round.renyi_entropy_up(w, Decimal(10**9)) - single_round.min_entropy(w)) < Decimal("1e-8")
