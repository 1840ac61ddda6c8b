"""The determinants of a network as sums of products: exact in structure, good over any number of decades.

Gain (i, j) is the bordered determinant over the determinant (Cramer's rule):

    y_i/u_j = det [M B_j; C_i D_ij] / det M

Equations that hold nothing but whole numbers (balances at nodes, imposed across values) are
eliminated first, by exact arithmetic on integers. The rest is expanded row by row, the
partial sums being kept by the set of columns used. Equal products with opposite signs
cancel as whole numbers, so a coefficient that the structure makes zero is absent, not
small; what remains of a passive network's denominator is a sum of positive terms, which
no spread of element values can spoil.
"""

from __future__ import annotations

import random
from collections.abc import Iterable
from dataclasses import dataclass

from rigtally.errors import RigError
from rigtally.physics.network import FIELD, MASK, Network, Polynomial, add

PRIME = (1 << 61) - 1
PRODUCT_LIMIT = 150_000  # multiplications of terms after which a network counts as large


class TooLarge(Exception):
    """The expansion has too many products: take the pencil instead."""


@dataclass(frozen=True)
class Expansion:
    """Denominator and numerators (outputs × inputs) as polynomials in s and the symbols."""

    denominator: Polynomial
    numerators: tuple[tuple[Polynomial, ...], ...]


Row = dict[int, Polynomial]


def expand(network: Network, limit: int = PRODUCT_LIMIT) -> Expansion:
    """The determinants of a network.

    Raises
    ------
    TooLarge
    RigError
        code "singular-network": the equations do not determine every variable.
    """
    rows, outputs, owners = eliminate(network)
    size = len(network.columns)
    check_rank(network, rows, owners, size)
    rows, outputs, owners = relevant(rows, outputs, owners, size)
    used = sorted({c for row in rows for c in row if c < size})
    if len(used) != len(rows):
        raise _singular(network, owners)
    place = {c: k for k, c in enumerate(used)}
    inputs = len(network.rig.drives)
    order = _row_order(rows, size)
    states = _sweep([rows[k] for k in order], outputs, place, size, inputs, limit)
    full = (1 << len(used)) - 1
    denominator = states.get(full, {})
    if not denominator:
        raise _singular(network, owners)
    table = tuple(
        tuple(_bordered(states, row, place, size, j, len(used), limit) for j in range(inputs))
        for row in outputs
    )
    return Expansion(denominator, table)


def eliminate(network: Network) -> tuple[list[Row], list[Row], list[str]]:
    """Rows and outputs after the equations of whole numbers have been used up."""
    rows = [{c: dict(p) for c, p in row.items()} for row in network.rows]
    outputs = [{c: dict(p) for c, p in row.items()} for row in network.outputs]
    owners = list(network.row_owners)
    size = len(network.columns)
    everything = [*rows, *outputs]
    holders: dict[int, set[int]] = {}
    for k, row in enumerate(everything):
        for c in row:
            holders.setdefault(c, set()).add(k)
    whole = {k for k, row in enumerate(rows) if _whole(row, size)}
    gone: set[int] = set()
    while whole:
        k = min(whole, key=lambda m: (len(rows[m]), m))
        whole.remove(k)
        source = rows[k]
        pivots = [c for c, p in source.items() if c < size and p in ({0: 1}, {0: -1})]
        if not pivots:
            continue
        pivot = min(pivots, key=lambda c: (len(holders[c]), c))
        sign = source[pivot][0]
        gone.add(k)
        for m in holders.pop(pivot) - gone:
            target = everything[m]
            factor = target.pop(pivot)
            for c, p in source.items():
                if c != pivot:
                    add(target, c, _product(factor, p), -sign)
                    (holders[c].add if c in target else holders[c].discard)(m)
        for c in source:
            if c != pivot:
                holders[c].discard(k)
    kept = [k for k in range(len(rows)) if k not in gone]
    return [rows[k] for k in kept], outputs, [owners[k] for k in kept]


def _whole(row: Row, size: int) -> bool:
    """Whether the unknowns' coefficients are whole numbers without s."""
    return all(set(p) == {0} for c, p in row.items() if c < size)


def relevant(
    rows: list[Row], outputs: list[Row], owners: list[str], size: int
) -> tuple[list[Row], list[Row], list[str]]:
    """Leave out the parts of the system that no drive moves or no reading sees.

    The rows fall into groups that share no unknown; a group without a drive stays at rest,
    a group without a reading is not looked at.
    """
    group = list(range(len(rows)))
    by_column: dict[int, int] = {}

    def find(k: int) -> int:
        while group[k] != k:
            k = group[k]
        return k

    for k, row in enumerate(rows):
        for c in row:
            if c < size:
                if c in by_column:
                    group[find(k)] = find(by_column[c])
                else:
                    by_column[c] = k
    seen = {find(by_column[c]) for row in outputs for c in row if c in by_column}
    moved = {find(k) for k, row in enumerate(rows) if any(c >= size for c in row)}
    keep = [k for k in range(len(rows)) if find(k) in seen & moved]
    columns = {c for k in keep for c in rows[k]}
    trimmed = [{c: p for c, p in row.items() if c >= size or c in columns} for row in outputs]
    return [rows[k] for k in keep], trimmed, [owners[k] for k in keep]


def check_rank(network: Network, rows: list[Row], owners: list[str], size: int) -> None:
    """Refuse equations that leave a variable free, or contradict each other, whatever the values.

    Gauss's elimination modulo a prime, at a random s and random symbols.
    """
    draw = random.Random(4099)
    at = [draw.randrange(1, PRIME) for _ in range(len(network.symbols) + 1)]
    left = [{c: v for c, p in row.items() if c < size and (v := modular_value(p, at))} for row in rows]
    columns = {c for row in left for c in row}
    bad: list[str] = []
    order = sorted(range(len(left)), key=lambda k: len(left[k]))
    pivots: dict[int, dict[int, int]] = {}
    for k in order:
        row = left[k]
        while row:
            c = min(row)
            if c not in pivots:
                inverse = pow(row[c], PRIME - 2, PRIME)
                pivots[c] = {m: v * inverse % PRIME for m, v in row.items()}
                break
            factor = row[c]
            for m, v in pivots[c].items():
                total = (row.get(m, 0) - factor * v) % PRIME
                if total:
                    row[m] = total
                else:
                    row.pop(m, None)
        else:
            bad.append(owners[k])
    if bad or len(pivots) < len(columns):
        loose = [network.columns[c] for c in sorted(columns - set(pivots))]
        raise _singular(network, bad or owners, loose)


def modular_value(poly: Polynomial, at: list[int]) -> int:
    """A polynomial modulo the prime; at[0] is s, at[k + 1] is symbol k."""
    total = 0
    for key, number in poly.items():
        value = number % PRIME
        place = 0
        while key:
            if key & MASK:
                value = value * pow(at[place], key & MASK, PRIME) % PRIME
            key >>= FIELD
            place += 1
        total += value
    return total % PRIME


def _row_order(rows: list[Row], size: int) -> list[int]:
    """An order in which few columns are open at a time (greedy)."""
    left = set(range(len(rows)))
    remaining = {c: sum(c in row for row in rows) for row in rows for c in row if c < size}
    open_columns: set[int] = set()
    order: list[int] = []
    while left:

        def cost(k: int) -> tuple[int, int, int]:
            new = [c for c in rows[k] if c < size and c not in open_columns]
            closed = [c for c in rows[k] if c < size and remaining[c] == 1]
            return len(new) - len(closed), len(rows[k]), k

        best = min(left, key=cost)
        left.remove(best)
        order.append(best)
        for c in rows[best]:
            if c < size:
                remaining[c] -= 1
                open_columns.add(c)
    return order


def _sweep(
    rows: list[Row], outputs: list[Row], place: dict[int, int], size: int, inputs: int, limit: int
) -> dict[int, Polynomial]:
    """Sums of signed products of one entry a row, by the set of columns used (bits; drives on top)."""
    n = len(place)
    readable = 0
    for row in outputs:
        for c in row:
            if c in place:
                readable |= 1 << place[c]
    last: dict[int, int] = {}
    for k, row in enumerate(rows):
        for c in row:
            if c < size:
                last[c] = k
    drives_mask = ((1 << inputs) - 1) << n
    states: dict[int, Polynomial] = {0: {0: 1}}
    products = 0
    closed = 0
    for k, row in enumerate(rows):
        entries = [(place[c] if c < size else n + c - size, p) for c, p in row.items()]
        closed |= sum(1 << place[c] for c, when in last.items() if when == k)
        after: dict[int, Polynomial] = {}
        for used, partial in states.items():
            for bit, entry in entries:
                flag = 1 << bit
                if used & flag or (flag & drives_mask and used & drives_mask):
                    continue
                now = used | flag
                missing = closed & ~now
                if missing and (missing & (missing - 1) or missing & ~readable):
                    continue
                sign = -1 if (used >> (bit + 1)).bit_count() & 1 else 1
                products += len(partial) * len(entry)
                if products > limit:
                    raise TooLarge
                _accumulate(after.setdefault(now, {}), partial, entry, sign)
        states = {used: p for used, p in after.items() if p}
    return states


def _bordered(
    states: dict[int, Polynomial],
    output: Row,
    place: dict[int, int],
    size: int,
    drive: int,
    n: int,
    limit: int,
) -> Polynomial:
    """det [M B_j; C_i D_ij], expanded by its last row; signs by the columns to its right."""
    total: Polynomial = {}
    full = (1 << n) - 1
    for c, entry in output.items():
        if c in place:
            used = (full ^ (1 << place[c])) | (1 << (n + drive))
            sign = -1 if (n - place[c]) & 1 else 1
        elif c == size + drive:
            used, sign = full, 1
        else:
            continue
        partial = states.get(used)
        if partial:
            if len(partial) * len(entry) > limit:
                raise TooLarge
            _accumulate(total, partial, entry, sign)
    return total


def _accumulate(target: Polynomial, first: Polynomial, second: Polynomial, sign: int) -> None:
    for key2, value2 in second.items():
        factor = sign * value2
        for key1, value1 in first.items():
            key = key1 + key2
            total = target.get(key, 0) + factor * value1
            if total:
                target[key] = total
            else:
                del target[key]


def _product(first: Polynomial, second: Polynomial) -> Polynomial:
    out: Polynomial = {}
    _accumulate(out, first, second, 1)
    return out


def s_power(key: int) -> int:
    """The power of s in a packed monomial."""
    return key & MASK


def _singular(network: Network, owners: Iterable[str], loose: Iterable[str] = ()) -> RigError:
    names = ", ".join(repr(name) for name in dict.fromkeys(owners))
    free = "; free: " + ", ".join(loose) if loose else ""
    return RigError(
        f"the elements do not determine every variable: see {names}{free}",
        where=network.rig.file,
        do="look for couplers that are tied to each other or to imposed values without an element between",
        code="singular-network",
    )
