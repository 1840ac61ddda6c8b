"""The scaled pencil M0 + s M1 of a network: poles, zeros and response without polynomials.

For large networks, and for orders at which polynomials in s have lost their meaning. Rows,
columns and time are scaled first so that the entries are of one size. The finite poles are
s = σ − 1/μ with the eigenvalues μ of (M0 + σM1)⁻¹ M1; how many are finite is known from
the structure (the largest number of entries with s in one transversal). Each is then
taken as a Rayleigh quotient of its left and right vectors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rigtally.physics.expansion import check_rank, eliminate, relevant
from rigtally.physics.network import FIELD, MASK, Network

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
UNSEEN = 1e-10  # relative size of a pole's residues below which no entry has it


@dataclass(frozen=True)
class Entries:
    """Every product in the system: weight · Π symbols · s^power at (row, column)."""

    row: NDArray[np.intp]
    column: NDArray[np.intp]
    power: NDArray[np.intp]
    weight: Array
    factors: tuple[tuple[int, ...], ...]


@dataclass(frozen=True)
class Modes:
    """Finite poles with their vectors: y^H (M0 + s M1) = 0, (M0 + s M1) z = 0, y^H M1 z = 1."""

    poles: ComplexArray
    left: ComplexArray  # (n, modes): conj(y)
    right: ComplexArray  # (n, modes)


class Pencil:
    """The numbers of one network at one set of symbol values."""

    def __init__(self, system: System, symbols: Array) -> None:
        self.system = system
        e = system.entries
        product = np.array([float(np.prod(symbols[list(f)])) if f else 1.0 for f in e.factors])
        value = e.weight * product
        self._value = value
        self._symbols = symbols
        row_scale, column_scale, self.omega = _scales(e, value, system.rows, system.size + system.inputs)
        self._scaled = value * row_scale[e.row] * column_scale[e.column] * self.omega**e.power
        n, q, r = system.size, system.outputs, system.inputs
        self._rows, self._columns = row_scale, column_scale
        full = np.zeros((2, n + q, n + r))
        np.add.at(full, (e.power, e.row, e.column), self._scaled)
        self.m0, self.m1 = full[0, :n, :n], full[1, :n, :n]
        self.b0, self.b1 = full[0, :n, n:], full[1, :n, n:]
        self.c0, self.d0 = full[0, n:, :n], full[0, n:, n:]

    def response(self, s: ComplexArray) -> ComplexArray:
        """(m, q, r) gains at complex s (rad/s), the powers of s of drives and readings included."""
        out = np.empty((s.size, self.system.outputs, self.system.inputs), dtype=complex)
        n = self.system.size
        unscale = np.outer(1.0 / self._rows[n:], 1.0 / self._columns[n:])
        unscale = unscale / self._divisors(self._symbols)[:, None]
        for k, point in enumerate(np.atleast_1d(s)):
            x = point / self.omega
            z = np.linalg.solve(self.m0 + x * self.m1, self.b0 + x * self.b1)
            out[k] = (self.d0 - self.c0 @ z) * unscale * point**self.system.shifts
        return out

    def _divisors(self, symbols: Array) -> Array:
        """ρ g of each reading of a level, else 1."""
        return np.array([1.0 if d is None else symbols[d] for d in self.system.divisors])

    def response_derivative(self, s: complex) -> tuple[ComplexArray, ComplexArray]:
        """Gains (q, r) and their exact derivative by the symbols (P, q, r) at one s."""
        n = self.system.size
        x = s / self.omega
        matrix = self.m0 + x * self.m1
        z = np.linalg.solve(matrix, self.b0 + x * self.b1)  # unknowns are −z u
        w = np.linalg.solve(matrix.T, self.c0.T).T
        unscale = np.outer(1.0 / self._rows[n:], 1.0 / self._columns[n:]) * s**self.system.shifts
        unscale = unscale / self._divisors(self._symbols)[:, None]
        gain = (self.d0 - self.c0 @ z) * unscale
        left = np.vstack([-w.T, np.eye(self.system.outputs)])  # (n + q, q)
        right = np.vstack([-z, np.eye(self.system.inputs)])  # (n + r, r)
        e = self.system.entries
        out = np.zeros((self._symbols.size, *gain.shape), dtype=complex)
        change = self._scaled * x**e.power
        for t, factors in enumerate(e.factors):
            if factors:
                part = change[t] * np.outer(left[e.row[t]], right[e.column[t]])
                for p in factors:
                    out[p] += part / self._symbols[p]
        out = out * unscale
        for i, d in enumerate(self.system.divisors):
            if d is not None:
                out[d, i] -= gain[i] / self._symbols[d]
        return gain, out

    def modes(self) -> Modes:
        """All finite poles, slowest first."""
        import scipy.linalg

        n, finite = self.system.size, self.system.order
        if n == 0 or finite == 0:
            nothing = np.zeros((n, 0), dtype=np.complex128)
            return Modes(np.zeros(0, dtype=np.complex128), nothing, nothing)
        shift = 1.0
        k = np.linalg.solve(self.m0 + shift * self.m1, self.m1)
        mu, left, right = scipy.linalg.eig(k, left=True, right=True)
        keep = np.argsort(-np.abs(mu))[:finite]
        right = right[:, keep]
        # left vectors of (M0 + σM1)⁻¹ M1 are those of the pencil times (M0 + σM1)
        y = np.linalg.solve((self.m0 + shift * self.m1).T, left[:, keep].conj())
        weight = np.einsum("ik,ij,jk->k", y, self.m1, right)
        weight = np.where(weight == 0.0, np.nan, weight)
        poles = -np.einsum("ik,ij,jk->k", y, self.m0, right) / weight
        rough = shift - 1.0 / mu[keep]
        bad = ~np.isfinite(poles) | (np.abs(poles - rough) > 1e-3 * np.abs(rough))
        poles = np.where(bad, rough, poles)
        size = np.abs(poles)
        poles = np.where(size < 1e-11 * max(1.0, np.median(size)) * 1e-2, 0.0, poles)
        poles = np.where(np.abs(poles.imag) < 1e-11 * size, poles.real, poles)
        order = np.lexsort((poles.imag, np.round(size, 13)))
        sorted_poles = np.asarray(poles[order] * self.omega, dtype=np.complex128)
        left = np.asarray((y / weight)[:, order], dtype=np.complex128)
        return Modes(sorted_poles, left, np.asarray(right[:, order], dtype=np.complex128))

    def residues(self, modes: Modes) -> ComplexArray:
        """(modes, q, r): G(s) = Σ R/(s − p) + …, without the drives' and readings' own powers of s."""
        n = self.system.size
        x = modes.poles / self.omega
        c = (self.c0 @ modes.right).T  # (modes, q)
        b = modes.left.T @ self.b0 + x[:, None] * (modes.left.T @ self.b1)
        unscale = np.outer(1.0 / self._rows[n:], 1.0 / self._columns[n:])
        unscale = unscale / self._divisors(self._symbols)[:, None]
        out: ComplexArray = -c[:, :, None] * b[:, None, :] * unscale * self.omega
        return out

    def seen(self, modes: Modes) -> NDArray[np.bool_]:
        """Which poles are in some entry: a rank test on the scaled vectors."""
        x = np.abs(modes.poles / self.omega)[:, None]
        cz = np.abs(self.c0 @ modes.right)
        yb = np.abs(modes.left.T @ self.b0 + (modes.poles / self.omega)[:, None] * (modes.left.T @ self.b1))
        norm = np.linalg.norm
        size_c = norm(self.c0, axis=1)[:, None] * norm(modes.right, axis=0)
        size_b = norm(modes.left, axis=0)[:, None] * (norm(self.b0, axis=0) + x * norm(self.b1, axis=0))
        observed = (cz > UNSEEN * size_c).T  # (modes, q)
        driven = yb > UNSEEN * size_b  # (modes, r)
        out: NDArray[np.bool_] = np.any(observed[:, :, None] & driven[:, None, :], axis=(1, 2))
        return out

    def pole_derivative(self, modes: Modes, which: NDArray[np.intp]) -> ComplexArray:
        """(P, poles) exact derivative by the symbols: ds = −y^H dM(s) z / (y^H M1 z)."""
        e = self.system.entries
        n = self.system.size
        x = modes.poles[which] / self.omega
        out = np.zeros((self._symbols.size, x.size), dtype=complex)
        for t, factors in enumerate(e.factors):
            if factors and e.row[t] < n and e.column[t] < n:
                part = self._scaled[t] * x ** e.power[t]
                part = -part * modes.left[e.row[t], which] * modes.right[e.column[t], which] * self.omega
                for p in factors:
                    out[p] += part / self._symbols[p]
        return out

    def zeros(self, output: int, drive: int) -> ComplexArray:
        """Finite zeros of one entry: where the bordered pencil loses rank; slowest first."""
        import scipy.linalg

        m0 = np.block([[self.m0, self.b0[:, [drive]]], [self.c0[[output]], self.d0[[output]][:, [drive]]]])
        m1 = np.zeros_like(m0)
        m1[:-1, :-1] = self.m1
        m1[:-1, -1] = self.b1[:, drive]
        finite = _finite(m0, m1)
        if finite < 1:
            return np.zeros(max(finite, 0), dtype=complex)
        shift = 0.7310585786  # no zero of a passive network is there by structure
        mu = scipy.linalg.eigvals(np.linalg.solve(m0 + shift * m1, m1))
        mu = mu[np.argsort(-np.abs(mu))[:finite]]
        found = np.asarray((shift - 1.0 / mu) * self.omega, dtype=np.complex128)
        return found[np.argsort(np.abs(found))]


class System:
    """The equations of a network once the whole-number ones are used up, ready for numbers."""

    def __init__(self, network: Network) -> None:
        width = len(network.columns)
        rows, outputs, owners = eliminate(network)
        check_rank(network, rows, owners, width)
        rows, outputs, _ = relevant(rows, outputs, ["" for _ in rows], width)
        self.equations = (rows, outputs)
        used = sorted({c for row in rows for c in row if c < width})
        place = {c: k for k, c in enumerate(used)}
        self.size = len(used)
        self.inputs = len(network.rig.drives)
        self.outputs = len(outputs)
        self.rows = self.size + self.outputs
        self.network = network
        at_row, at_column, power, weight, factors = [], [], [], [], []
        for i, row in enumerate([*rows, *outputs]):
            for c, poly in row.items():
                for key, number in poly.items():
                    at_row.append(i)
                    at_column.append(place[c] if c < width else self.size + c - width)
                    power.append(key & MASK)
                    weight.append(float(number))
                    factors.append(_factors(key >> FIELD))
        self.entries = Entries(
            np.array(at_row, dtype=np.intp),
            np.array(at_column, dtype=np.intp),
            np.array(power, dtype=np.intp),
            np.array(weight),
            tuple(factors),
        )
        e = self.entries
        inside = (e.row < self.size) & (e.column < self.size)
        m0 = np.zeros((self.size, self.size))
        m1 = np.zeros((self.size, self.size))
        m0[e.row[inside & (e.power == 0)], e.column[inside & (e.power == 0)]] = 1.0
        m1[e.row[inside & (e.power == 1)], e.column[inside & (e.power == 1)]] = 1.0
        self.order = _finite(m0, m1)
        self.shifts = np.add.outer(np.array(network.output_powers), np.array(network.input_powers))
        self.divisors = network.output_divisors


def _factors(key: int) -> tuple[int, ...]:
    out: list[int] = []
    symbol = 0
    while key:
        out.extend([symbol] * (key & MASK))
        key >>= FIELD
        symbol += 1
    return tuple(out)


def _finite(m0: Array, m1: Array) -> int:
    """Degree of det(M0 + s M1) by structure: most entries with s in one transversal; −1 if there is none."""
    from scipy.optimize import linear_sum_assignment

    if not m0.size:
        return 0
    cost = np.where(m1 != 0.0, -1.0, np.where(m0 != 0.0, 0.0, 1e6))
    i, j = linear_sum_assignment(cost)
    total = cost[i, j].sum()
    return -1 if total > 1e5 else round(-total)


def _scales(e: Entries, value: Array, rows: int, columns: int) -> tuple[Array, Array, float]:
    """Row and column factors and a frequency that bring all entries near 1 (mean of logarithms)."""
    logs = np.log2(np.abs(value))
    r, c = np.zeros(rows), np.zeros(columns)
    w = 0.0
    n_row = np.maximum(np.bincount(e.row, minlength=rows), 1)
    n_column = np.maximum(np.bincount(e.column, minlength=columns), 1)
    moving = e.power == 1
    for _ in range(60):
        r = -np.bincount(e.row, logs + c[e.column] + w * e.power, minlength=rows) / n_row
        c = -np.bincount(e.column, logs + r[e.row] + w * e.power, minlength=columns) / n_column
        if moving.any():
            w = -float(np.mean((logs + r[e.row] + c[e.column])[moving]))
    return 2.0 ** np.round(r), 2.0 ** np.round(c), float(2.0 ** np.round(w))
