"""From the expanded determinants to numbers: structure, coefficients, exact derivatives.

The structure (which powers of s there are, which factors all entries share) is found by
exact arithmetic modulo a prime at random symbol values, not by rounding. Coefficients are
sums of products of the symbols; they are evaluated relative to the nominal values with
the powers of two kept apart, so that nothing over- or underflows on the way.
"""

from __future__ import annotations

import random
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.physics.expansion import PRIME, Expansion, s_power
from rigtally.physics.network import FIELD, MASK, Network, Polynomial
from rigtally.physics.rig import Drive, Reading, Rig

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Structure:
    """What the network implies whatever its values.

    Attributes
    ----------
    powers : [output][input] -> powers of s with a coefficient that is not identically zero
    degree : int
        Of the denominator, integrators included.
    integrators : int
        Poles at s = 0.
    common : int
        Degree of the factor that the determinants share for all values and that is removed.
    removed_zero : int
        Poles at s = 0 of the network that no entry has.
    denominator_powers : powers of s with a coefficient that is not identically zero
    """

    powers: tuple[tuple[tuple[int, ...], ...], ...]
    degree: int
    integrators: int
    common: int
    removed_zero: int
    denominator_powers: tuple[int, ...] = ()


@dataclass(frozen=True)
class Coefficients:
    """Raw coefficients before common factors are removed, and their derivative by the symbols.

    denominator (m + 1,), numerators (q, r, m + 1), ascending, scaled to a leading 1;
    by_denominator (P, m + 1), by_numerators (P, q, r, m + 1).
    """

    denominator: Array
    numerators: Array
    by_denominator: Array
    by_numerators: Array


class Transfer:
    """The transfer matrix of a network as a function of its symbols."""

    def __init__(self, network: Network, expansion: Expansion, nominal: Array) -> None:
        den, nums, removed = _aligned(network, expansion)
        self.polynomials = (den, nums)
        self.shape = (len(nums), len(nums[0]))
        self.raw_degree = max(s_power(k) for k in den)
        _refuse_improper(network, nums, self.raw_degree)
        self.structure = _structure(den, nums, len(network.symbols), removed)
        self.nominal = np.array(nominal, dtype=float)
        self._compile(network, den, nums)

    def _compile(self, network: Network, den: Polynomial, nums: Sequence[Sequence[Polynomial]]) -> None:
        q, r = self.shape
        width = self.raw_degree + 1
        polys = [(0, den)]
        for i in range(q):
            polys.extend((1 + i * r + j, nums[i][j]) for j in range(r))
        slots, numbers, keys, owner = [], [], [], []
        for place, poly in polys:
            for key, number in poly.items():
                slots.append(place * width + s_power(key))
                numbers.append(number)
                keys.append(key >> FIELD)
                owner.append(place)
        count = len(network.symbols)
        exponents = np.zeros((len(keys), count), dtype=int)
        for t, key in enumerate(keys):
            p = 0
            while key:
                exponents[t, p] = key & MASK
                key >>= FIELD
                p += 1
        for t, place in enumerate(owner):
            if place:
                divisor = network.output_divisors[(place - 1) // r]
                if divisor is not None:
                    exponents[t, divisor] -= 1
        self.slots = np.array(slots)
        self.exponents = exponents
        self.size = (1 + q * r) * width
        mantissa, exponent = np.frexp(np.where(self.nominal == 0.0, 1.0, self.nominal))
        product = np.array(numbers, dtype=float) * np.prod(mantissa**exponents, axis=1)
        binary = exponents @ exponent
        lead = binary[(self.slots == self.raw_degree)].max()
        self.weights = np.ldexp(product, np.clip(binary - lead, -1022, 1023))
        self._base = np.where(self.nominal == 0.0, 1.0, self.nominal)
        self._uses = [(p, np.flatnonzero(exponents[:, p])) for p in range(count)]
        self._picked = _picked(exponents)
        self._sum = np.zeros((self.size, len(slots)))
        self._sum[self.slots, np.arange(len(slots))] = 1.0

    def _terms(self, symbols: Array) -> Array:
        """Values of the products: (…, P) symbols -> (…, terms)."""
        ratio = np.asarray(symbols, dtype=float) / self._base
        if ratio.ndim == 1:
            both = np.concatenate([ratio, 1.0 / ratio, [1.0]])
            single: Array = self.weights * np.multiply.reduce(both[self._picked], axis=1)
            return single
        terms = np.broadcast_to(self.weights, (*ratio.shape[:-1], self.weights.size)).copy()
        for p, where in self._uses:
            if where.size:
                e = self.exponents[where, p]
                factor = ratio[..., p, None]
                terms[..., where] *= factor if np.all(e == 1) else factor**e
        return terms

    def values(self, symbols: Array) -> tuple[Array, Array]:
        """Denominator (…, m + 1) and numerators (…, q, r, m + 1), scaled to a leading 1."""
        flat = self._terms(symbols) @ self._sum.T
        width = self.raw_degree + 1
        lead = flat[..., width - 1]
        flat = flat / lead[..., None]
        q, r = self.shape
        return flat[..., :width], flat[..., width:].reshape(*flat.shape[:-1], q, r, width)

    def coefficients(self, symbols: Array) -> Coefficients:
        """Values and exact derivatives at one set of symbols (P,)."""
        terms = self._terms(symbols)
        x = np.asarray(symbols, dtype=float)
        flat = self._sum @ terms
        by = (self._sum @ (terms[:, None] * self.exponents / np.where(x == 0.0, 1.0, x))).T
        width = self.raw_degree + 1
        lead = flat[width - 1]
        by = by / lead - np.outer(by[:, width - 1], flat) / lead**2
        flat = flat / lead
        q, r = self.shape
        return Coefficients(
            flat[:width],
            flat[width:].reshape(q, r, width),
            by[:, :width],
            by[:, width:].reshape(-1, q, r, width),
        )


def _picked(exponents: NDArray[np.int_]) -> NDArray[np.int_]:
    """Each term's factors as places in [x, 1/x, 1], the last filling up."""
    count = exponents.shape[1]
    width = max(1, int(np.abs(exponents).sum(axis=1).max(initial=0)))
    out = np.full((exponents.shape[0], width), 2 * count)
    for t, row in enumerate(exponents):
        places = [p + (count if e < 0 else 0) for p, e in enumerate(row) for _ in range(abs(int(e)))]
        out[t, : len(places)] = places
    return out


def _aligned(network: Network, expansion: Expansion) -> tuple[Polynomial, list[list[Polynomial]], int]:
    """Polynomials with the drives' and readings' own powers of s, common powers of s removed.

    Returns the denominator, the numerators, and how many of the network's own poles at
    s = 0 were removed.
    """
    shifts = {
        (i, j): network.output_powers[i] + network.input_powers[j]
        for i, row in enumerate(expansion.numerators)
        for j, p in enumerate(row)
        if p
    }
    least = min([0, *shifts.values()])
    low = min([s_power(k) for k in expansion.denominator]) - least
    for (i, j), shift in shifts.items():
        low = min(low, min(s_power(k) for k in expansion.numerators[i][j]) + shift - least)
    den = {k - least - low: c for k, c in expansion.denominator.items()}
    nums = [
        [{k + shifts[i, j] - least - low: c for k, c in p.items()} if p else {} for j, p in enumerate(row)]
        for i, row in enumerate(expansion.numerators)
    ]
    return den, nums, max(0, low + least)


def _refuse_improper(network: Network, nums: Sequence[Sequence[Polynomial]], degree: int) -> None:
    for i, row in enumerate(nums):
        for j, p in enumerate(row):
            if p and max(s_power(k) for k in p) > degree:
                raise needs_derivative(network.rig, network.rig.readings[i], network.rig.drives[j])


def needs_derivative(rig: Rig, reading: Reading, drive: Drive) -> RigError:
    """The refusal of a reading that no finite drive could give."""
    return RigError(
        f"reading {reading.name!r} ({reading.of}) needs the derivative of drive {drive.name!r} "
        f"({drive.imposes})",
        where=rig.file,
        do="put a resistance between, or drive the other quantity "
        "(the through value instead of the across value)",
        code="needs-derivative",
    )


def _structure(
    den: Polynomial, nums: Sequence[Sequence[Polynomial]], symbols: int, removed_zero: int
) -> Structure:
    draw = random.Random(20011)
    best: tuple[int, list[int], list[list[list[int]]]] | None = None
    for _ in range(2):
        x = [draw.randrange(1, PRIME) for _ in range(symbols)]
        d = _modular(den, x)
        ns = [[_modular(p, x) for p in row] for row in nums]
        common = d
        for row in ns:
            for p in row:
                if p and len(common) > 1:
                    common = greatest_common(common, p)
        g = len(common) - 1
        if best is None or g < best[0]:
            best = (
                g,
                divide(d, common)[0],
                [[divide(p, common)[0] if p else [] for p in row] for row in ns],
            )
    g, d, ns = best if best is not None else (0, [], [])
    integrators = next(k for k, c in enumerate(d) if c)
    powers = tuple(tuple(tuple(k for k, c in enumerate(p) if c) for p in row) for row in ns)
    below = tuple(k for k, c in enumerate(d) if c)
    return Structure(powers, len(d) - 1, integrators, g, removed_zero, below)


def _modular(poly: Polynomial, x: Sequence[int]) -> list[int]:
    """Coefficients in ascending powers of s, modulo the prime."""
    out: list[int] = []
    for key, number in poly.items():
        power = s_power(key)
        value = number % PRIME
        rest, p = key >> FIELD, 0
        while rest:
            value = value * pow(x[p], rest & MASK, PRIME) % PRIME
            rest >>= FIELD
            p += 1
        out.extend([0] * (power + 1 - len(out)))
        out[power] = (out[power] + value) % PRIME
    return _trimmed(out)


def _trimmed(p: list[int]) -> list[int]:
    while p and p[-1] == 0:
        p.pop()
    return p


def divide(first: list[int], second: list[int]) -> tuple[list[int], list[int]]:
    """Quotient and remainder modulo the prime (ascending coefficients)."""
    rest = list(first)
    inverse = pow(second[-1], PRIME - 2, PRIME)
    quotient = [0] * max(0, len(rest) - len(second) + 1)
    for k in range(len(quotient) - 1, -1, -1):
        factor = rest[k + len(second) - 1] * inverse % PRIME
        quotient[k] = factor
        if factor:
            for m, c in enumerate(second):
                rest[k + m] = (rest[k + m] - factor * c) % PRIME
    return quotient, _trimmed(rest)


def greatest_common(first: list[int], second: list[int]) -> list[int]:
    """Greatest common divisor modulo the prime (Euclid)."""
    a, b = list(first), list(second)
    while b:
        a, b = b, divide(a, b)[1]
    return a
