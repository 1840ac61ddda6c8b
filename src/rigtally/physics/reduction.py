"""Common factors of all entries, removed by a rank test: to the least order that serves them together.

If the denominator d and all numerators n_k have a common factor of degree g, then
d·v_k = n_k·u with u of degree n − g and v_k of fitting degree has exactly one solution
(up to a factor): u = d/common, v_k = n_k/common. It is the null vector of a matrix of the
coefficients, found by the singular value decomposition with the time scaled so that the
coefficients are of one size.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.parameters import polished_roots
from rigtally.physics.transfer import Structure

Array = NDArray[np.float64]
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
    powers, degree, integrators
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

    @staticmethod
    def found(structure: Structure, denominator: Array, numerators: Array) -> Reduction:
        """The reduction at the nominal values of a structure (raw coefficients)."""
        poles = polished_roots(denominator)
        cancels = [p for p in poles if p != 0 and _vanish(numerators, p)]
        chance = max(0, len(cancels) - structure.common)
        zero = tuple(0j for _ in range(structure.removed_zero))
        plain = Reduction(
            structure.common, 0, structure.powers, structure.degree, structure.integrators, zero
        )
        if not structure.common and not chance:
            return plain
        removed = (*zero, *(complex(p) for p in cancels[: structure.common + chance]))
        if not chance:
            return Reduction(
                structure.common, 0, structure.powers, structure.degree, structure.integrators, removed
            )
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
        m = denominator.size - 1
        scale, norms = _scales(denominator, numerators)
        matrix = self._matrix(denominator * scale, numerators * scale / norms[..., None])
        w = self._null(matrix)
        n = self.degree
        free = np.delete(matrix, n, axis=1)
        slopes = [
            self._matrix(d * scale, p * scale / norms[..., None]) @ w
            for d, p in zip(by_denominator, by_numerators, strict=True)
        ]
        found = np.linalg.lstsq(free, -np.array(slopes).T, rcond=None)[0].T
        out = [self._unpack(np.insert(row, n, 0.0), scale, norms, m) for row in found]
        return np.array([d for d, _ in out]), np.array([p for _, p in out])

    def _solve(self, denominator: Array, numerators: Array) -> tuple[Array, Array]:
        scale, norms = _scales(denominator, numerators)
        matrix = self._matrix(denominator * scale, numerators * scale / norms[..., None])
        return self._unpack(self._null(matrix), scale, norms, denominator.size - 1)

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
