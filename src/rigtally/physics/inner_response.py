"""What happens inside a rig while its drives move: flows and pressures that nobody reads."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.forms.transfer_matrix import polynomial
from rigtally.physics.expansion import TooLarge
from rigtally.physics.model import Model
from rigtally.physics.parameters import polished_roots
from rigtally.physics.rig import Reading, Rig

Array = NDArray[np.float64]
APART = 1e-6  # relative distance below which two poles count as one and are parted


class InnerResponse:
    """The gain from all drives to one inner quantity.

    Raises
    ------
    RigError
        The quantity has no proper gain (it needs a drive's derivative), or no drive moves it.
    """

    def __init__(self, rig: Rig, reading: Reading) -> None:
        try:
            model = Model(replace(rig, readings=(reading,)))
        except TooLarge:
            raise RigError("the rig is too large to look inside", code="too-large") from None
        solved = model.solve()
        self.denominator = solved.denominator
        self.numerators = solved.numerators[0]  # (drives, n + 1)

    def largest_gain(self, frequencies: Array) -> Array:
        """(drives,) largest |G| over angular frequencies."""
        s = np.asarray(1j * frequencies, dtype=np.complex128)
        out: Array = np.abs(polynomial(self.numerators, s) / polynomial(self.denominator, s)).max(axis=1)
        return out

    def simulate(self, inputs: Array, interval: float) -> Array:
        """(n,) response to (drives, n) inputs, straight between samples, from the steady state of the first.

        Each pole is a recursion of its own, x[k+1] = e^{pT} x[k] + a u[k] + b u[k+1], exact for
        ramps; poles that coincide are parted by 1e-6 of their size.
        """
        from scipy import signal

        poles = _parted(polished_roots(self.denominator))
        out = np.zeros(inputs.shape[1])
        top = self.denominator.size - 1
        for numerator, u in zip(self.numerators, inputs, strict=True):
            direct = numerator[top]
            out += direct * u
            rest = numerator - direct * self.denominator
            for k, p in enumerate(poles):
                residue = np.polyval(rest[::-1], p) / np.prod(p - np.delete(poles, k))
                a, b = _ramp_weights(p * interval)
                start = -u[0] / p if p != 0 else 0.0
                drive = interval * (a * u[:-1] + b * u[1:])
                decay = np.exp(p * interval)
                x = np.empty(u.size, dtype=complex)
                x[0] = start
                if u.size > 1:
                    x[1:], _ = signal.lfilter([1.0], [1.0, -decay], drive.astype(complex), zi=[decay * start])
                out += (residue * x).real
        return out


def _ramp_weights(z: complex) -> tuple[complex, complex]:
    """Weights of u[k] and u[k+1] in ∫ e^{z(1−τ)} (u[k](1−τ) + u[k+1] τ) dτ over one interval."""
    if abs(z) < 1e-2:
        b = 0.5 + z / 6 + z * z / 24 + z**3 / 120 + z**4 / 720
        whole = 1 + z / 2 + z * z / 6 + z**3 / 24 + z**4 / 120
        return whole - b, b
    e = np.expm1(z)
    b = (e - z) / (z * z)
    return e / z - b, b


def _parted(poles: NDArray[np.complex128]) -> NDArray[np.complex128]:
    out = poles.copy()
    for k in range(out.size):
        while any(abs(out[k] - other) <= APART * abs(out[k]) for other in out[:k]):
            out[k] += 2 * APART * max(abs(out[k]), 1e-300)
    return out
