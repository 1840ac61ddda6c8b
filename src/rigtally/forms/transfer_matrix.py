"""TransferFunction and TransferMatrix: polynomials in s over one denominator."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True)
class TransferMatrix:
    """Several outputs over several inputs with one denominator and dead times.

    Attributes
    ----------
    numerators : (outputs, inputs, n + 1) array
        Coefficients in ascending powers of s.
    denominator : (n + 1,) array
        Ascending powers of s; the highest has the coefficient 1.
    dead_time : (outputs, inputs) array
        Seconds, each at least 0.
    outputs, inputs : tuple of str
    """

    numerators: Array
    denominator: Array
    dead_time: Array
    outputs: tuple[str, ...] = ("output",)
    inputs: tuple[str, ...] = ("input",)

    def __call__(self, angular_frequency: ArrayLike) -> ComplexArray:
        """Complex gain at angular frequencies in rad/s.

        Returns (m, outputs, inputs); (m,) for one output and one input, and a
        scalar's shape is kept for a scalar frequency.
        """
        w = np.asarray(angular_frequency, dtype=float)
        s = 1j * np.atleast_1d(w)
        num = polynomial(self.numerators, s)  # (q, r, m)
        den = polynomial(self.denominator, s)  # (m,)
        gain = num / den * np.exp(-self.dead_time[..., None] * s)
        out: ComplexArray = np.moveaxis(gain, -1, 0)
        if len(self.outputs) == len(self.inputs) == 1:
            out = out[:, 0, 0]
        return out if w.ndim else out[0]

    @property
    def poles(self) -> ComplexArray:
        """Roots of the denominator in rad/s, slowest first."""
        found = np.roots(self.denominator[::-1]).astype(complex)
        order = np.lexsort((found.imag, np.abs(found)))
        out: ComplexArray = found[order]
        return out

    def zeros(self, output: int = 0, inputs: int = 0) -> ComplexArray:
        """Roots of one entry's numerator in rad/s."""
        out: ComplexArray = np.roots(np.trim_zeros(self.numerators[output, inputs], "b")[::-1]).astype(
            complex
        )
        return out

    def entry(self, output: int, inputs: int) -> TransferMatrix:
        """One entry as a matrix of one output and one input."""
        return TransferMatrix(
            self.numerators[output : output + 1, inputs : inputs + 1],
            self.denominator,
            self.dead_time[output : output + 1, inputs : inputs + 1],
            (self.outputs[output],),
            (self.inputs[inputs],),
        )

    def simulate(self, input: ArrayLike, interval: float, between: str = "held") -> Array:
        """Response from rest to a sampled input; see `rigtally.forms.simulate`."""
        from rigtally.forms.simulate import simulate

        return simulate(self, input, interval, between=between)

    def to_dict(self) -> dict[str, Any]:
        """Plain lists, for files."""
        return {
            "outputs": list(self.outputs),
            "inputs": list(self.inputs),
            "numerators": self.numerators.tolist(),
            "denominator": self.denominator.tolist(),
            "dead_time": self.dead_time.tolist(),
        }


def polynomial(coefficients: Array, s: ComplexArray) -> ComplexArray:
    """Horner's rule over the last axis (ascending powers): (..., n+1), (m,) -> (..., m)."""
    top = coefficients.shape[-1] - 1
    value = np.broadcast_to(coefficients[..., top, None], (*coefficients.shape[:-1], s.size)).astype(complex)
    for k in range(top - 1, -1, -1):
        value = value * s + coefficients[..., k, None]
    return value
