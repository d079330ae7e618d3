"""The words of a certificate: what it assumes, method by method, and the cautions that go with every use."""

from __future__ import annotations

from extractor.model import FACTOR_METHODS, Declaration

CAUTIONS = (
    "The certificate holds only under the assumptions listed in it; nothing measured in the run can test all of them.",
    "Statistical test batteries on the bits certify nothing; neither do the diagnostics of this report.",
    "Boxes that nobody trusts may remember: using the same boxes again after bits were collected can leak those bits "
    "(memory attacks; Barrett, Colbeck, Kent 2013).",
    "Bits that were not certified, or whose bundle was not verified, must not be used as keys.",
    "Where a regulation or an accreditation asks for validated random number modules, that rule prevails.",
)

_COMMON = (
    "Quantum theory is correct; the adversary holds any quantum system correlated with the boxes before the run and receives "
    "nothing from the boxes while it lasts.",
    "The stations are isolated: during a round neither box learns the other's setting or outcome, and outcomes leave a station only into the record.",
    "The records are honest: every round of the run is in it, in order, and the classical computers that record and process it are trusted.",
    "No round of this run is part of another run from which bits are taken.",
    "How the run was split into segments did not depend on its outcomes, and the ledger's salted commitments (HMAC-SHA-256 under secret keys) "
    "hide what they commit to.",
    "The seed is uniform, independent of the boxes and of the adversary, and unknown to the boxes until the run was sealed.",
)


def assumptions(declaration: Declaration, rounds: int) -> tuple[str, ...]:
    """Sentences a referee has to accept before the certified length means anything."""
    s = declaration.settings
    lines = list(_COMMON)
    if s.bias:
        lines.append(f"Given everything before it, each setting bit of a test round has a probability within {s.bias!r} of the declared "
                     f"distribution {list(s.distribution)}, whatever the adversary knows.")
    else:
        lines.append(f"The settings of each test round are drawn with the declared probabilities {list(s.distribution)} for (x, y) = "
                     "00, 01, 10, 11, independently of the boxes, of the adversary and of the past.")
    if s.test_probability < 1:
        lines.append(f"Each round is a test with probability exactly {s.test_probability!r}, drawn like the settings and unknown to the boxes "
                     f"before their outcomes; other rounds use settings {list(s.generation)}.")
    if rounds < declaration.rounds:
        lines.append(f"The run stopped after {rounds} of {declaration.rounds} rounds by a decision that looked at nothing later than the "
                     "last round it kept; no rounds were left off afterwards.")
    if declaration.seed_source == "system":
        lines.append("The seed was drawn from the random source of an operating system, which gave uniform bits that nobody else knew before they were used.")
    else:
        lines.append("The seed comes from a source that the user answers for.")
    if any(value is not None for value in declaration.no_click):
        lines.append("No-clicks were given the outcome declared before the run; no round was discarded for lack of a click.")
    if declaration.disclosure == "confidential":
        lines.append("The adversary does not see this certificate, the tally or the report while the bits have to stay secret "
                     "(declare disclosure \"public\" to have what they reveal paid for).")
    else:
        lines.append("Published are at most: certificate, report, tally, no-click counts, one digest of the rounds and the commitment to the "
                     "segments' digests; what they reveal is paid for.")
    if declaration.method not in FACTOR_METHODS:
        lines.append("The accumulation theorem holds in the form stated under \"source\"; this program's constants were checked against "
                     "the published figures of experiments, not against a proof of its own.")
        lines.append("Secrecy is meant in the usual either-or form: the run is accepted with probability at most the soundness error, or "
                     "the accepted bits are that close to uniform.")
    return tuple(lines)
