"""Common factors of all entries, removed by a rank test: to the least order that serves them together.

If the denominator d and all numerators n_k have a common factor c of degree g, then
d·v_k = n_k·u with u of degree n − g has exactly one solution (up to a factor): u = d/c,
v_k = n_k/c. It is the null vector of a matrix of the coefficients, found by the singular
value decomposition with the time scaled so that the coefficients are of one size; then
c·u = d, c·v_k = n_k are solved by Gauss-Newton steps, each equation relative to its own
coefficient, so that small coefficients come out as exactly as large ones.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.parameters import polished_roots
from rigtally.physics.transfer import Structure

Array = NDArray[np.float64]
GAUSS_NEWTON = 4
CANCELS = 1e-10  # relative size of all numerators at a pole below which the pole is common to all


@dataclass(frozen=True)
class Reduction:
    """Which degree is removed, and what is left.

    Attributes
    ----------
    common : int
        Degree of the common factor.
    by_chance : int
        How much of it is there at the nominal values only, not by structure.
    powers, degree, integrators, denominator_powers
        As in `Structure`, of what is left.
    removed : tuple of complex
        The removed poles at the nominal values.
    """

    common: int
    by_chance: int
    powers: tuple[tuple[tuple[int, ...], ...], ...]
    degree: int
    integrators: int
    removed: tuple[complex, ...]
    denominator_powers: tuple[int, ...] = ()

    @staticmethod
    def found(structure: Structure, denominator: Array, numerators: Array) -> Reduction:
        """The reduction at the nominal values of a structure (raw coefficients)."""
        poles = polished_roots(denominator)
        cancels = [p for p in poles if p != 0 and _vanish(numerators, p)]
        chance = max(0, len(cancels) - structure.common)
        zero = tuple(0j for _ in range(structure.removed_zero))
        plain = Reduction(
            structure.common,
            0,
            structure.powers,
            structure.degree,
            structure.integrators,
            zero,
            structure.denominator_powers,
        )
        if not structure.common and not chance:
            return plain
        removed = (*zero, *(complex(p) for p in cancels[: structure.common + chance]))
        if not chance:
            return replace(plain, removed=removed)
        common = structure.common + chance
        trial = Reduction(common, chance, (), structure.degree - chance, structure.integrators, removed)
        den, nums = trial.apply(denominator, numerators)
        powers = tuple(tuple(_present(n, den) for n in row) for row in nums)
        return Reduction(common, chance, powers, trial.degree, structure.integrators, removed)

    def apply(self, denominator: Array, numerators: Array) -> tuple[Array, Array]:
        """Reduced monic denominator (…, n + 1) and numerators (…, q, r, n + 1)."""
        if not self.common:
            return denominator, numerators
        if denominator.ndim > 1:
            pairs = [self.apply(d, n) for d, n in zip(denominator, numerators, strict=True)]
            return np.array([d for d, _ in pairs]), np.array([n for _, n in pairs])
        return self._solve(denominator, numerators)

    def derivative(
        self, denominator: Array, numerators: Array, by_denominator: Array, by_numerators: Array
    ) -> tuple[Array, Array]:
        """Derivatives of what is left: M w = 0 differentiated, with the leading 1 of u kept."""
        if not self.common:
            return by_denominator, by_numerators
        scale, norms = _scales(denominator, numerators)
        d, p = denominator * scale, numerators * scale / norms[..., None]
        free = self._free(p)
        jacobian, rows, columns = self._equations(self._factors(d, p), d, p, free)
        right = np.concatenate(
            [
                (by_denominator * scale)[:, None, :],
                (by_numerators * scale / norms[..., None]).reshape(by_denominator.shape[0], -1, d.size),
            ],
            axis=1,
        ).reshape(by_denominator.shape[0], -1)
        found = np.linalg.lstsq(jacobian, (right * rows).T, rcond=None)[0].T * columns
        out = [self._unpack(_spread(row, free), scale, norms, d.size - 1) for row in found[:, self.common :]]
        return np.array([x for x, _ in out]), np.array([y for _, y in out])

    def _solve(self, denominator: Array, numerators: Array) -> tuple[Array, Array]:
        scale, norms = _scales(denominator, numerators)
        _, rest = self._factors(denominator * scale, numerators * scale / norms[..., None])
        return self._unpack(rest, scale, norms, denominator.size - 1)

    def _factors(self, den: Array, nums: Array) -> tuple[Array, Array]:
        """The common factor c (g + 1,), monic, and [u, v_1, v_2, …] (1 + entries, n + 1)."""
        free = self._free(nums)
        rest = self._null(self._matrix(den, nums)).reshape(-1, self.degree + 1)
        rest = np.where(free, rest, 0.0)
        rest[0, self.degree] = 1.0
        c = np.polynomial.polynomial.polydiv(den, rest[0])[0]
        c = c / c[-1]
        for _ in range(GAUSS_NEWTON):
            jacobian, rows, columns = self._equations((c, rest), den, nums, free)
            left = np.array([np.convolve(c, part) for part in rest])
            wanted = np.vstack([den[None], nums.reshape(-1, den.size)])
            step = np.linalg.lstsq(jacobian, ((wanted - left).ravel() * rows), rcond=None)[0] * columns
            c = c + np.append(step[: self.common], 0.0)
            rest = rest + _spread(step[self.common :], free)
        return c, rest

    def _free(self, nums: Array) -> NDArray[np.bool_]:
        """Which coefficients of [u, v_1, …] are free: u but for its leading 1, v by its powers."""
        n = self.degree
        q, r = nums.shape[:2]
        out = np.ones((1 + q * r, n + 1), dtype=bool)
        if self.denominator_powers:
            out[0] = False
            out[0, list(self.denominator_powers)] = True
        out[0, : self.integrators] = False
        out[0, n] = False
        if self.powers:
            for k in range(q * r):
                out[1 + k] = False
                out[1 + k, list(self.powers[k // r][k % r])] = True
        return out

    def _equations(
        self, factors: tuple[Array, Array], den: Array, nums: Array, free: NDArray[np.bool_]
    ) -> tuple[Array, Array, Array]:
        """Scaled derivative of [c·u, c·v_1, …] by the free coefficients of c, u, v; row and column scales."""
        c, rest = factors
        g, n, m = self.common, self.degree, den.size - 1
        wanted = np.vstack([den[None], nums.reshape(-1, m + 1)])
        blocks = rest.shape[0]
        full = np.zeros((blocks * (m + 1), g + blocks * (n + 1)))
        for k in range(blocks):
            top = k * (m + 1)
            for i in range(g):
                full[top + i : top + i + n + 1, i] = rest[k]
            for i in range(n + 1):
                full[top + i : top + i + g + 1, g + k * (n + 1) + i] = c
        full = full[:, np.concatenate([np.ones(g, dtype=bool), free.ravel()])]
        size = np.abs(wanted)
        largest = size.max(axis=1, keepdims=True)
        size = np.where(size > 0.0, size, np.where(largest > 0.0, largest, 1.0))
        rows = (1.0 / size).ravel()
        full = full * rows[:, None]
        norm = np.linalg.norm(full, axis=0)
        columns = 1.0 / np.where(norm == 0.0, 1.0, norm)
        return full * columns, rows, columns

    def _null(self, matrix: Array) -> Array:
        """The null vector with the leading coefficient of u at 1."""
        w = np.linalg.svd(matrix)[2][-1]
        out: Array = w / w[self.degree]
        return out

    def _matrix(self, den: Array, nums: Array) -> Array:
        """The equations d·v_k − n_k·u = 0 for [u, v_1, v_2, …]."""
        n, m = self.degree, den.size - 1
        q, r = nums.shape[:2]
        rows = m + n + 1
        matrix = np.zeros((q * r * rows, (n + 1) * (1 + q * r)))
        for k in range(q * r):
            for c in range(n + 1):
                top = k * rows + c
                matrix[top : top + m + 1, c] = -nums[k // r, k % r]
                matrix[top : top + m + 1, (n + 1) * (1 + k) + c] = den
        return matrix

    def _unpack(self, w: Array, scale: Array, norms: Array, m: int) -> tuple[Array, Array]:
        """Coefficients in the rig's own time and size."""
        n = self.degree
        parts = w.reshape(-1, n + 1) / scale[m - n :]
        return parts[0], parts[1:].reshape(*norms.shape, n + 1) * norms[..., None]


def _spread(values: Array, free: NDArray[np.bool_]) -> Array:
    """Free coefficients back in their places, zero elsewhere."""
    out = np.zeros(free.shape)
    out[free] = values
    return out


def _scales(denominator: Array, numerators: Array) -> tuple[Array, Array]:
    """Factors of the coefficients for a time scale of the poles, and the size of each numerator."""
    m = denominator.size - 1
    low = next(k for k, c in enumerate(denominator) if c != 0.0)
    time = abs(denominator[low]) ** (1.0 / (m - low)) if m > low else 1.0
    scale = time ** (np.arange(m + 1.0) - m)
    norms = np.abs(numerators * scale).max(axis=-1)
    return scale, np.where(norms == 0.0, 1.0, norms)


def _vanish(numerators: Array, pole: complex) -> bool:
    powers = pole ** np.arange(numerators.shape[-1])
    size = np.abs(numerators) @ np.abs(powers)
    value = np.abs(numerators @ powers)
    return bool(np.all(value <= CANCELS * size))


def _present(numerator: Array, denominator: Array) -> tuple[int, ...]:
    """Powers whose coefficient is not rounding, with the time scaled to the poles."""
    scale, _ = _scales(denominator, numerator[None])
    sizes = np.abs(numerator) * scale
    return tuple(int(k) for k in np.flatnonzero(sizes > 1e-9 * sizes.max())) if sizes.max() > 0 else ()
