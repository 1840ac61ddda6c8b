"""The pair of poles that dominates a large rig's step response, and the share that it explains.

Where G(s) = s^q (K + …) at low frequency, the second order that stands for it is
K s^q ωn²/(s² + 2ζωn s + ωn²). The share is that of the transient's energy: with e(t) the
step response of G/s^q less its final value K, and e₂(t) that of the second order,

    share = 1 − ∫(e − e₂)² dt / ∫e² dt,      ∫ Σ a_k ā_l e^{(p_k + p̄_l)t} dt = −Σ a_k ā_l/(p_k + p̄_l).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.forms.named import Form
from rigtally.physics.pencil import Modes, Pencil

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
CANDIDATES = 6  # slowest pairs that are tried


@dataclass(frozen=True)
class Dominant:
    """The two poles, and for each entry its power of s at low frequency, its gain and the share explained."""

    poles: tuple[complex, complex]
    live: tuple[tuple[bool, ...], ...]
    power: tuple[tuple[int, ...], ...]
    gain: Array
    share: Array

    def again(self, pencil: Pencil, modes: Modes) -> Dominant:
        """The same pair at other values: the poles nearest to it, gains anew."""
        pair = tuple(complex(modes.poles[k]) for k in self._nearest(modes))
        return replace(self, poles=(pair[0], pair[1]), gain=_gains(pencil, modes, np.array(self.power))[0])

    def _nearest(self, modes: Modes) -> list[int]:
        first = int(np.argmin(np.abs(modes.poles - self.poles[0])))
        rest = np.abs(modes.poles - self.poles[1])
        rest[first] = np.inf
        return [first, int(np.argmin(rest))]

    def theta(self, form: Form) -> Array:
        """Gains, ωn and ζ."""
        w2 = (self.poles[0] * self.poles[1]).real
        total = -(self.poles[0] + self.poles[1]).real
        gains = [self.gain[i, j] for i, j in form.entries]
        return np.array([*gains, math.sqrt(w2), total / (2.0 * math.sqrt(w2))])

    def sensitivity(self, form: Form, pencil: Pencil, modes: Modes, by_symbol: Array) -> Array:
        """(p, v) exact derivatives, by_symbol being (P, v)."""
        which = np.array(self._nearest(modes))
        d = by_symbol.T @ pencil.pole_derivative(modes, which)  # (v, 2)
        p1, p2 = self.poles
        w = math.sqrt((p1 * p2).real)
        dw = (d[:, 0] * p2 + p1 * d[:, 1]).real / (2.0 * w)
        z = -(p1 + p2).real / (2.0 * w)
        dz = (-(d[:, 0] + d[:, 1]).real - 2.0 * z * dw) / (2.0 * w)
        by = _gains(pencil, modes, np.array(self.power))[1]
        d_gain = np.tensordot(by_symbol.T, by, axes=1)
        return np.array([*(d_gain[:, i, j] for i, j in form.entries), dw, dz])


def dominant_pair(pencil: Pencil, modes: Modes, seen: NDArray[np.intp]) -> Dominant:
    """The pair with the largest share over all entries.

    Raises
    ------
    RigError
        code "no-dominant-pair": the rig is unstable, or integrates.
    """
    poles = modes.poles[seen]
    if np.any(poles.real >= 0.0):
        raise RigError(
            f"a rig of order {poles.size} that is unstable or integrates has no dominant pair of poles",
            where=pencil.system.network.rig.file,
            do="leave out elements until the order is at most 10",
            code="no-dominant-pair",
        )
    power, live = _low_frequency(pencil, modes)
    gain, _ = _gains(pencil, modes, power)
    amplitudes = pencil.residues(modes)[seen] * poles[:, None, None] ** (
        pencil.system.shifts - power - 1
    )  # of e^{pt} in the step response of G/s^q
    upper = [k for k in np.argsort(np.abs(poles)) if poles[k].imag > 0][:CANDIDATES]
    pairs = [(complex(poles[k]), complex(np.conj(poles[k]))) for k in upper]
    real = [k for k in np.argsort(np.abs(poles)) if poles[k].imag == 0][:2]
    if len(real) == 2:
        pairs.append((complex(poles[real[0]]), complex(poles[real[1]])))
    best: tuple[float, Array, tuple[complex, complex]] | None = None
    for pair in pairs:
        share = np.full(gain.shape, np.nan)
        for i, j in zip(*np.nonzero(live), strict=True):
            share[i, j] = _share(poles, amplitudes[:, i, j], pair, gain[i, j])
        total = float(np.nanmean(share))
        if best is None or total > best[0]:
            best = (total, share, pair)
    if best is None:
        raise RigError("the rig has no pair of poles", code="no-dominant-pair")
    return Dominant(
        best[2],
        tuple(tuple(bool(x) for x in row) for row in live),
        tuple(tuple(int(x) for x in row) for row in power),
        gain,
        best[1],
    )


def _share(
    poles: ComplexArray, amplitudes: ComplexArray, pair: tuple[complex, complex], gain: float
) -> float:
    p1, p2 = pair
    if p1 == p2:
        return math.nan
    # K ωn²/((s − p1)(s − p2) s): residues at p1 and p2
    second = gain * (p1 * p2) * np.array([1.0 / ((p1 - p2) * p1), 1.0 / ((p2 - p1) * p2)])
    whole = _energy(poles, amplitudes)
    left = _energy(np.append(poles, [p1, p2]), np.append(amplitudes, -second))
    return 1.0 - left / whole if whole > 0 else math.nan


def _energy(poles: ComplexArray, amplitudes: ComplexArray) -> float:
    total = poles[:, None] + np.conj(poles)[None, :]
    return float((-np.outer(amplitudes, np.conj(amplitudes)) / total).sum().real)


def _low_frequency(pencil: Pencil, modes: Modes) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
    """The power of s of each entry at low frequency, and which entries are not zero."""
    slow = float(np.abs(modes.poles[np.abs(modes.poles) > 0]).min())
    points = np.array([1e-3 * slow, 2e-3 * slow], dtype=np.complex128)
    gains = np.abs(pencil.response(points))
    spread = np.abs(
        pencil.response(np.array([1j * abs(p) for p in modes.poles[:: max(1, len(modes.poles) // 8)]]))
    )
    live = spread.max(axis=0) > 1e-14 * max(float(spread.max()), 1e-300)
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = np.log2(gains[1] / gains[0])
    return np.where(live, np.round(np.nan_to_num(slope)), 0).astype(np.intp), live


def _gains(pencil: Pencil, modes: Modes, power: NDArray[np.intp]) -> tuple[Array, Array]:
    """lim G/s^q at s → 0 (q, r) and its derivative by the symbols (P, q, r).

    At s and −s far below the slowest pole: their mean is right to (s/p)².
    """
    slow = float(np.abs(modes.poles[np.abs(modes.poles) > 0]).min()) * 1e-7
    above, by_above = pencil.response_derivative(complex(slow))
    below, by_below = pencil.response_derivative(complex(-slow))
    up, down = slow**power, (-slow) ** power
    return 0.5 * (above / up + below / down).real, 0.5 * (by_above / up + by_below / down).real
