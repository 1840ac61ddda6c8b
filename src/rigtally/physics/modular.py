"""Structure of a large network by exact arithmetic modulo a prime: which powers, which entries.

The determinant and the bordered determinants are evaluated at as many values of s as they
have coefficients, each by sparse elimination at one random set of symbols, and
interpolated modulo the prime.
"""

from __future__ import annotations

import random
from collections.abc import Sequence

from rigtally.physics.expansion import PRIME, Row, modular_value
from rigtally.physics.transfer import Structure, divide, greatest_common


def modular_structure(
    rows: Sequence[Row], outputs: Sequence[Row], size: int, inputs: int, symbols: int, order: int,
    shifts: Sequence[Sequence[int]],
) -> Structure:  # fmt: skip
    """The structure that `Transfer` finds from expanded determinants, without expanding them.

    Parameters
    ----------
    rows, outputs : equations and readings after elimination of whole numbers
    size : int
        Number of columns; drives stand from there on.
    order : int
        Bound on the degree of the determinant.
    shifts : (outputs, inputs)
        Powers of s of the readings and drives themselves.
    """
    draw = random.Random(7919)
    at = [0, *(draw.randrange(1, PRIME) for _ in range(symbols))]
    points = [draw.randrange(1, PRIME) for _ in range(order + 3)]
    determinants, gains = [], []
    plan: list[tuple[int, int]] | None = None
    for s in points:
        at[0] = s
        plan, determinant, gain = _solve(rows, outputs, size, inputs, at, plan)
        determinants.append(determinant)
        gains.append([[g * determinant % PRIME for g in row] for row in gain])
    den = _interpolated(points, determinants)
    nums = [
        [_interpolated(points, [g[i][j] for g in gains]) for j in range(inputs)] for i in range(len(outputs))
    ]
    live = [shifts[i][j] for i, row in enumerate(nums) for j, p in enumerate(row) if p]
    least = min([0, *live])
    den = [0] * -least + den
    nums = [
        [[0] * (shifts[i][j] - least) + p if p else [] for j, p in enumerate(row)]
        for i, row in enumerate(nums)
    ]
    low = min(_first(p) for p in [den, *(p for row in nums for p in row if p)])
    den = den[low:]
    nums = [[p[low:] if p else [] for p in row] for row in nums]
    common = den
    for row in nums:
        for p in row:
            if p and len(common) > 1:
                common = greatest_common(common, p)
    den = divide(den, common)[0]
    nums = [[divide(p, common)[0] if p else [] for p in row] for row in nums]
    powers = tuple(tuple(tuple(k for k, c in enumerate(p) if c) for p in row) for row in nums)
    return Structure(
        powers, len(den) - 1, _first(den), len(common) - 1, max(0, low + least),
        tuple(k for k, c in enumerate(den) if c),
    )  # fmt: skip


def _first(p: Sequence[int]) -> int:
    return next(k for k, c in enumerate(p) if c)


def _solve(
    rows: Sequence[Row],
    outputs: Sequence[Row],
    size: int,
    inputs: int,
    at: list[int],
    plan: list[tuple[int, int]] | None,
) -> tuple[list[tuple[int, int]], int, list[list[int]]]:
    """Pivots (row, column), the determinant up to a sign that the pivots fix, and the gains at one s."""
    left = [{c: v for c, p in row.items() if (v := modular_value(p, at))} for row in rows]
    below = [{c: v for c, p in row.items() if (v := modular_value(p, at))} for row in outputs]
    holders: dict[int, set[int]] = {}
    for k, row in enumerate(left):
        for c in row:
            holders.setdefault(c, set()).add(k)
    waiting = set(range(len(left)))
    pivots: list[tuple[int, int]] = []
    determinant = 1
    for step in range(len(left)):
        if plan is None:
            k = min(waiting, key=lambda m: (sum(c < size for c in left[m]), m))
            column = min((c for c in left[k] if c < size), key=lambda c: (len(holders[c]), c))
        else:
            k, column = plan[step]
        pivots.append((k, column))
        waiting.remove(k)
        source = left[k]
        determinant = determinant * source[column] % PRIME
        inverse = pow(source[column], PRIME - 2, PRIME)
        for target, number in [*((left[m], m) for m in holders[column] & waiting), *((b, -1) for b in below)]:
            if column not in target:
                continue
            factor = target[column] * inverse % PRIME
            for c, v in source.items():
                total = (target.get(c, 0) - factor * v) % PRIME
                if total:
                    target[c] = total
                    if number >= 0:
                        holders.setdefault(c, set()).add(number)
                elif c in target:
                    del target[c]
                    if number >= 0:
                        holders[c].discard(number)
    return pivots, determinant, [[row.get(size + j, 0) for j in range(inputs)] for row in below]


def _interpolated(points: Sequence[int], values: Sequence[int]) -> list[int]:
    """Coefficients, ascending, of the polynomial through the points (Newton's form, modulo the prime)."""
    table = list(values)
    n = len(points)
    for level in range(1, n):
        for k in range(n - 1, level - 1, -1):
            span = pow(points[k] - points[k - level], PRIME - 2, PRIME)
            table[k] = (table[k] - table[k - 1]) * span % PRIME
    out = [table[n - 1]]
    for k in range(n - 2, -1, -1):
        shifted = [0, *out]
        for m, c in enumerate(out):
            shifted[m] = (shifted[m] - points[k] * c) % PRIME
        shifted[0] = (shifted[0] + table[k]) % PRIME
        out = shifted
    while out and out[-1] == 0:
        out.pop()
    return out
