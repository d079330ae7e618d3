"""Published counts of Bell tests, per setting pair (1,1), (1,2), (2,1), (2,2) and outcomes ++, +-, -+, --.

Settings 1, 2 are our 0, 1; outcome + (a detection, for the photonic ones) is our 0, - our 1; the pair (2,2) is the
anticorrelated one, our minus = (1, 1). Counts as collected in R. D. Gill's public re-analyses (companion of
arXiv:2209.00702).
"""

from extractor.model import SETTING_PAIRS, Tally, cell_index

# Hensen et al., Nature 526, 682 (2015): electron spins, Delft.
DELFT_2015 = ((23, 3, 4, 23), (33, 11, 5, 30), (22, 10, 6, 24), (4, 20, 21, 6))
# 150 events of the atomic experiment in Munich (Rosenfeld et al., PRL 119, 010402 (2017), is the later,
# larger data set).
MUNICH_150 = ((16, 4, 3, 13), (11, 4, 2, 17), (19, 4, 3, 16), (4, 22, 10, 2))
# Giustina et al., PRL 115, 250401 (2015): photons, Vienna.
VIENNA_2015 = ((141439, 73391, 76224, 875392736), (146831, 67941, 326768, 874976534),
               (158338, 425067, 58742, 875239860), (8392, 576445, 463985, 874651457))
# Shalm et al., PRL 115, 250402 (2015): photons, NIST, aggregated.
NIST_2015 = ((6378, 3282, 3189, 43897356), (6794, 2821, 23243, 43276943),
             (6486, 21334, 2843, 43338281), (106, 27539, 30040, 42502788))


def tally_of(table: tuple[tuple[int, int, int, int], ...]) -> Tally:
    """The table as a tally of test rounds."""
    counts = [0] * 32
    for (x, y), row in zip(SETTING_PAIRS, table):
        for i, count in enumerate(row):
            counts[cell_index(1, x, y, i >> 1, i & 1)] = count
    return Tally(tuple(counts))
