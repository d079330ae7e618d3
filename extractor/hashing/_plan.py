"""Sizes of the blocks in which the FFT backend works, and the proof that its rounding is harmless.

Blocks. The raw string is cut into blocks of L bits, the output into T tiles of R bits. A block and a tile meet
in a window of L + R - 1 <= N seed bits; the product of the three is read off a cyclic convolution of N points,
where what wraps around falls on places that are not read. Blocks are collected in groups of G; per tile the
products of a group are summed as spectra and transformed back once. T = 1 (R = m, L = N - m + 1) while that is
cheapest; else R = L = N/2, so that the windows of neighbouring blocks and tiles coincide and each is
transformed once per group.

Rounding. u = 2^-53. A block x holds at most L ones and its window s at most N, so |x| <= sqrt(L) and
|s| <= sqrt(N) in the 2-norm. Every algorithm used (radix 2, 4, 8 passes on complex or half-complex data, and the
split of `_transform`) leads from each input to each output over one path of unit factors; a radix-2 level adds to
it the relative error of one complex addition (u), one complex product (sqrt 5 u) and one factor's own error (mu).
  Percival 2003 (Math. Comp. 72, theorem 5.1, from memory): a convolution computed by three transforms of
    t = log2 N levels errs by at most |x||s| ((1+u)^(3t) (1+sqrt 5 u)^(3t+1) (1+mu)^(3t) - 1), which is about
    12.7 t u |x||s| at mu = u.
  Higham 2002 (Accuracy and Stability of Numerical Algorithms, theorem 24.2, from memory): one transform errs by
    at most t eta/(1 - t eta) relative to its 2-norm, eta = mu + gamma_4 (sqrt 2 + mu), gamma_4 = 4u/(1-4u);
    so eta = 6.7 u at mu = u and 20 t u |x||s| for three transforms: the more pessimistic of the two.
We take eta = 16 u = 2^-49 per level, which even allows factors wrong by mu = 10 u, and two more levels per
transform for the factor table and its product in the split form (true cost: below 9 u against 32 u granted).
Summing G products in order adds at most G u and each product 4 u, all relative to
sum |x_k||s_k| <= G sqrt(L N). Hence for every value v

    |computed v - v| <= E(N, L, G) = G sqrt(L N) · (exp(3 (log2 N + 2) 2^-49 + (G + 4) 2^-53) - 1).

(The sum of products reaches v through the last transform, along one path of unit factors per frequency:
|v| <= (1/N) sum_f |X_f||S_f| <= |x||s| by Cauchy and Parseval, and errors alike.)
The plan keeps E < 1/4, so the nearest integer is the exact count. Independently, a value more than 1/8 away from
an integer stops the computation. The loosest plans have E below 3·10^-4; measured distances are below 10^-8.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from extractor.errors import Defect
from extractor.hashing._transform import LONGEST_SHORT_POINTS

SMALLEST_POINTS = 1 << 10
LARGEST_POINTS = 1 << 23
ERROR_LIMIT = 0.25
_GROUP_BITS = 1 << 28               # raw bits collected before an inverse transform (32 MiB packed) ...
_GROUP_BLOCKS = 1 << 13             # ... and blocks: more would save nothing and only loosen the bound
_KEPT_BYTES = 1 << 29               # spectra kept per group when the output is tiled ...
_KEPT_BYTES_PER_OUTPUT_BIT = 16     # ... or this times m, if that is more ...
_KEPT_BYTES_LIMIT = 1 << 31         # ... but never above this

# Nanoseconds per point of one transform, up to the size named, and of multiplying two spectra and adding;
# ratios matter, not the machine. The last size is a little overpriced: twice the memory for no gain at m = 10^6.
_NS_TRANSFORM = ((1 << 15, 5.0), (LONGEST_SHORT_POINTS, 10.0), (1 << 22, 14.0), (LARGEST_POINTS, 17.0))
_NS_PRODUCT = 2.0
_NS_PER_CALL = 30_000.0


@dataclass(frozen=True)
class Plan:
    """Sizes: points N of a transform, block L, tile R (bits), tiles T, blocks per group G."""

    points: int
    block_bits: int
    tile_bits: int
    tiles: int
    group_blocks: int

    @property
    def error_bound(self) -> float:
        """Proven distance of every computed value from the exact integer."""
        return error_bound(self.points, self.block_bits, self.group_blocks)

    @property
    def memory_bytes(self) -> int:
        """Working memory of the backend: spectra and real buffers (8 bytes per point each), packed raw bits, output."""
        spectra = 4 if self.tiles == 1 else 2 * self.group_blocks + 1
        output = self.tiles * self.tile_bits // 8 + 1
        return (spectra + 2) * 8 * self.points + 4 * self.points + self.group_blocks * self.block_bits // 8 + 2 * output


def error_bound(points: int, block_bits: int, group_blocks: int) -> float:
    """E(N, L, G) of the module docstring."""
    exponent = 3 * (math.log2(points) + 2) * 2.0**-49 + (group_blocks + 4) * 2.0**-53
    return group_blocks * math.sqrt(block_bits * points) * math.expm1(exponent)


def _cost_ns(plan: Plan, raw_bits: int) -> float:
    """Estimated time for the whole raw string."""
    blocks = -(-raw_bits // plan.block_bits)
    groups = -(-blocks // plan.group_blocks)
    if plan.tiles == 1:
        forward, inverse, products = 2 * blocks, groups, blocks
    else:
        forward, inverse, products = 2 * blocks + groups * (plan.tiles - 1), groups * plan.tiles, blocks * plan.tiles
    each = next(ns for size, ns in _NS_TRANSFORM if plan.points <= size)
    per_point = each * (forward + 1.5 * inverse) + _NS_PRODUCT * products
    batch = max(2, (1 << 17) // plan.points) if plan.points <= LONGEST_SHORT_POINTS else 1
    return plan.points * (per_point + each) + _NS_PER_CALL * (blocks / batch + inverse)


def _candidate(points: int, tiled: bool, raw_bits: int, output_bits: int) -> Plan | None:
    if tiled:
        block = tile = points // 2
        tiles = -(-output_bits // tile)
        kept = min(max(_KEPT_BYTES, _KEPT_BYTES_PER_OUTPUT_BIT * output_bits), _KEPT_BYTES_LIMIT)
        group = max(1, min(kept // (2 * 8 * points), tiles))
    else:
        block, tile, tiles = (points - output_bits + 1) // 8 * 8, output_bits, 1
        if block < 8:
            return None
        group = max(1, min(_GROUP_BITS // block, _GROUP_BLOCKS))
    group = min(group, -(-raw_bits // block))
    while group > 1 and error_bound(points, block, group) >= ERROR_LIMIT:
        group //= 2
    return Plan(points, block, tile, tiles, group)


def choose_plan(raw_bits: int, output_bits: int, points: int | None = None) -> Plan:
    """The cheapest plan by estimate for n raw and m output bits; `points` fixes N (a power of two, 2^4..2^23).

    Raises Defect if the plan does not fit its transform or its proven error is not below 1/4.
    """
    powers = range(SMALLEST_POINTS.bit_length() - 1, LARGEST_POINTS.bit_length())
    sizes = [points] if points else [1 << k for k in powers]
    plans = [plan for size in sizes for tiled in (False, True)
             if (plan := _candidate(size, tiled, raw_bits, output_bits)) is not None and (not tiled or plan.tiles > 1)]
    best = min(plans, key=lambda plan: _cost_ns(plan, raw_bits))
    if best.error_bound >= ERROR_LIMIT or best.block_bits + best.tile_bits - 1 > best.points or best.block_bits % 8:
        raise Defect(f"no sound plan for {raw_bits} raw and {output_bits} output bits: {best}")
    return best
