"""How good certified score tables are, and how long they take.

    python -m tests.bench.tables [--json] [--rigs name ...] [--no-published] [--no-rounds]

Per rig and order: the certified rate in bits per round beside the rate that the issue of this bench asks for, seconds
of the search and of
the certification (bound and recheck), nodes, and the second check's seconds. Then rounds for 512 bits at soundness
2^-64 on the dimmest
rig, and, as a yardstick of the method only, what the counts of two published experiments would be credited under a
table found on them.
Seconds are wall time; a busy machine lengthens them.
"""

from __future__ import annotations

import argparse
import math
import time

import numpy as np

from extractor import documents, pipeline
from extractor.bell.rigs import Rig, optimal_rig
from extractor.entropy import table_making, table_validity, two_sided_grid
from extractor.model import Declaration, Settings
from extractor.seal import table_check
from tests.bench.machine import show
from tests.published.counts import NIST_2015, VIENNA_2015, tally_of

ROWS = {
    "werner_0.99": (lambda: Rig(visibility=0.99), ((1e-3, 1.496), (1e-2, 1.371))),
    "werner_0.93": (lambda: Rig(visibility=0.93), ((1e-3, 1.172), (1e-2, 1.049))),
    "werner_0.80": (lambda: Rig(visibility=0.80), ((1e-3, 0.4797), (1e-2, 0.3509))),
    "werner_0.75": (lambda: Rig(visibility=0.75), ((1e-3, 0.2136), (1e-2, 0.0896))),
    "efficiency_0.80": (lambda: optimal_rig(0.8), ((1e-3, 0.1610), (1e-2, 0.1029))),
    "pairs_0.01": (lambda: optimal_rig(0.8, 0.01), ((1e-3, 1.608e-3), (5e-3, 1.319e-3))),
    "pairs_0.005": (lambda: optimal_rig(0.763, 0.005), ((1e-3, 2.84e-4), (1e-2, 1.50e-4))),
}


def row(name: str, figures: dict[str, float]) -> None:
    make, wanted = ROWS[name]
    behaviour = pipeline.expect(model=make())["behaviour"]
    for e, rate in wanted:
        start = time.perf_counter()
        made = table_making.make_table(behaviour, Settings(), 10**9, 1e-9, 1 + e)
        took = time.perf_counter() - start
        start = time.perf_counter()
        results = [two_sided_grid.excess_bound(problem, target=0.0) for problem in table_validity.problems(made.table,
                Settings())]
        certification = time.perf_counter() - start
        declaration = Declaration("bench", 10**9, "factor-table", 1e-9, "credit", 2 * 10**9, order=made.table.order,
                table=made.table)
        start = time.perf_counter()
        holds = table_check.table_holds(documents.declaration_document(declaration))
        label = f"{name}_order_1+{e:g}"
        figures |= {
            f"{label}_bits_per_round": made.rate, f"{label}_of_wanted": made.rate / rate,
                    f"{label}_validity_bound": made.validity_bound,
            f"{label}_lost_to_certification": made.lost / made.rate,
                    f"{label}_nodes": float(sum(r.nodes for r in results)),
            f"{label}_search_and_certification_s": took, f"{label}_certification_s": certification,
            f"{label}_second_check_holds": float(holds), f"{label}_second_check_s": time.perf_counter() - start}


def published(figures: dict[str, float]) -> None:
    for name, counts, wanted in (("photons_2015_vienna", VIENNA_2015, 1.25e5), ("photons_2015_nist", NIST_2015, 4.1e3)):
        tally = tally_of(counts)
        start = time.perf_counter()
        plan = pipeline.plan(**pipeline.expect(calibration=tally), rounds=tally.rounds, soundness=1e-6,
                method="factor-table")
        earned = float(np.dot(plan.table["test"], tally.counts[16:])) - plan.penalty_bits
        figures |= {f"{name}_bits": float(plan.certified_length), f"{name}_of_wanted": plan.certified_length / wanted,
                    f"{name}_bits_on_raw_counts": earned, f"{name}_order_minus_1": plan.order - 1,
                            f"{name}_s": time.perf_counter() - start}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--rigs", nargs="*", choices=tuple(ROWS), default=list(ROWS))
    parser.add_argument("--no-published", action="store_true", help="leave out the published counts")
    parser.add_argument("--no-rounds", action="store_true", help="leave out the rounds for 512 bits")
    args = parser.parse_args()
    figures: dict[str, float] = {}
    for name in args.rigs:
        row(name, figures)
    if not args.no_rounds:
        expected = pipeline.expect(model=optimal_rig(0.763, 0.005))
        start = time.perf_counter()
        rounds = pipeline.rounds_for(512, **expected, soundness=2.0**-64, method="factor-table")
        figures |= {"rounds_for_512_bits": float(rounds), "rounds_for_512_bits_of_wanted": rounds / 4.7e7,
                    "rounds_for_512_bits_s": time.perf_counter() - start}
    if not args.no_published:
        published(figures)
    figures["least_of_wanted"] = min((v for k,
            v in figures.items() if k.endswith("_of_wanted") and "rounds" not in k), default=math.nan)
    show(figures, args.json)


if __name__ == "__main__":
    main()
