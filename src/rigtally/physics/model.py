"""A rig as a function: values in, coefficients and parameters out, without linearising."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.forms.named import Form, matrix_form
from rigtally.physics.expansion import expand
from rigtally.physics.line_frequency import leading_frequency, leading_pole, solve_frequency
from rigtally.physics.network import Network, assemble
from rigtally.physics.oscillating_line import factors, womersley_number
from rigtally.physics.parameters import (
    parameter_derivative,
    parameters_from_coefficients,
    roots_with_derivative,
)
from rigtally.physics.reduction import Reduction
from rigtally.physics.rig import Element, Rig
from rigtally.physics.rig_values import FrictionModel, RigValues
from rigtally.physics.transfer import Transfer

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Solved:
    """The rig at one set of values: coefficients, parameters and their exact derivatives by the values.

    denominator (n + 1,), numerators (q, r, n + 1), theta (p,); by_… have the values first
    (v, …), `sensitivity` is (p, v). `omega` is the frequency of the oscillating lines (NaN without).
    """

    omega: float
    denominator: Array
    numerators: Array
    by_denominator: Array
    by_numerators: Array
    theta: Array
    sensitivity: Array
    poles: NDArray[np.complex128]
    by_poles: NDArray[np.complex128]


class Model:
    """The network of a rig, expanded once, evaluated many times."""

    def __init__(self, rig: Rig, network: Network | None = None) -> None:
        self.rig = rig
        self.network = network or assemble(rig)
        self.values = RigValues(rig, self.network.symbols)
        expansion = expand(self.network)
        start = self.values.nominal
        self.transfer = Transfer(self.network, expansion, self.values.symbol_values(start, 1.0))
        self.omega = self._solve_omega(start, None)
        for line in self.values.oscillating:
            self.values.friction[line.name] = self._friction_model(line)
        nominal = self.values.symbol_values(self.values.nominal, self.omega)
        den, nums = self.transfer.values(nominal)
        self.reduction = Reduction.found(self.transfer.structure, den, nums)
        self.form = self._form()

    def _form(self) -> Form:
        powers = self.reduction.powers
        for reading, row in zip(self.rig.readings, powers, strict=True):
            if not any(row):
                raise RigError(
                    f"no drive moves reading {reading.name!r}",
                    where=self.rig.file,
                    do="connect it to a drive through elements, or leave it out",
                    code="unmoved-reading",
                )
        return matrix_form(
            [r.name for r in self.rig.readings],
            [d.name for d in self.rig.drives],
            powers,
            self.reduction.degree - self.reduction.integrators,
            integrators=self.reduction.integrators,
        )

    def coefficients(self, values: Array, omega: float | None = None) -> tuple[Array, Array]:
        """Monic denominator (n + 1,) and numerators (q, r, n + 1) at (v,) values."""
        if omega is None:
            omega = self._solve_omega(values, self.omega)
        den, nums = self.transfer.values(self.values.symbol_values(values, omega))
        return self.reduction.apply(den, nums)

    def evaluate(self, values: Array) -> Array:
        """(v,) values -> (p,) parameters, re-solved; NaN where the values make no such rig."""
        nothing = np.full(len(self.form.names), np.nan)
        values = np.asarray(values, dtype=float)
        if not np.all(np.isfinite(values)):
            return nothing
        try:
            with np.errstate(all="ignore"):
                den, nums = self.coefficients(values)
                theta = parameters_from_coefficients(self.form, den, nums)
        except (RigError, ArithmeticError, ValueError, np.linalg.LinAlgError):
            return nothing
        return theta if np.all(np.isfinite(theta)) else nothing

    def evaluate_many(self, values: Array) -> Array:
        """(m, v) values -> (m, p) parameters."""
        draws = np.asarray(values, dtype=float)
        with np.errstate(all="ignore"):
            omega = self._solve_omega(draws, self.omega)
            symbols = self.values.symbol_values(draws, omega)
            den, nums = self.reduction.apply(*self.transfer.values(symbols))
            return parameters_from_coefficients(self.form, den, nums)

    def solve(self, values: Array | None = None) -> Solved:
        """Everything at (v,) values (the nominal ones unless stated), with exact derivatives."""
        x = self.values.nominal if values is None else np.asarray(values, dtype=float)
        omega = self.omega if values is None else self._solve_omega(x, self.omega)
        symbols, by_values, by_omega = self.values.symbol_derivatives(x, omega)
        raw = self.transfer.coefficients(symbols)
        by_symbol = by_values
        if self.values.oscillating:
            by_symbol = by_values + np.outer(
                by_omega, self._omega_derivative(raw, by_values, by_omega, omega)
            )
        d_den = by_symbol.T @ raw.by_denominator
        d_num = np.tensordot(by_symbol.T, raw.by_numerators, axes=1)
        den, nums = self.reduction.apply(raw.denominator, raw.numerators)
        d_den, d_num = self.reduction.derivative(raw.denominator, raw.numerators, d_den, d_num)
        theta = parameters_from_coefficients(self.form, den, nums)
        sensitivity = parameter_derivative(self.form, theta, d_den, d_num)
        poles, by_poles = roots_with_derivative(den, d_den)
        return Solved(omega, den, nums, d_den, d_num, theta, sensitivity, poles, by_poles)

    def _frequency(self, values: Array, omega: Any) -> Array:
        den, _ = self.transfer.values(self.values.symbol_values(values, omega))
        return leading_frequency(den)

    def _solve_omega(self, values: Array, start: float | None) -> Any:
        """The lines' frequency at (v,) or (m, v) values: a float or (m,)."""
        single = values.ndim == 1
        if not self.values.oscillating:
            return math.nan if single else np.full(values.shape[0], math.nan)
        first = self._frequency(values, 0.0) if start is None else start
        if single:

            def at(omega: Array) -> Array:
                return np.atleast_1d(self._frequency(values, float(omega[0])))

            return float(solve_frequency(at, np.array([float(first)]), self.rig.file)[0])
        begin = np.broadcast_to(first, values.shape[:1]).astype(float)
        return solve_frequency(lambda w: self._frequency(values, w), begin, self.rig.file)

    def _omega_derivative(self, raw: Any, by_values: Array, by_omega: Array, omega: float) -> Array:
        """(v,) dω by the values: implicit differentiation of ω = |p(values, ω)|."""
        d_den = np.vstack([by_values.T @ raw.by_denominator, by_omega @ raw.by_denominator])
        poles, by = roots_with_derivative(raw.denominator, d_den)
        lead = leading_pole(poles)
        slope = (np.conj(poles[lead]) * by[lead]).real / omega
        out: Array = slope[:-1] / (1.0 - slope[-1])
        return out

    def womersley(self, line: Element, omega: float | None = None) -> float:
        """Womersley number of a line at the rig's frequency (or at `omega`)."""
        get = self.values.element_value
        w = self.omega if omega is None else omega
        return float(womersley_number(get(line, "bore"), get(line, "density"), get(line, "viscosity"), w))

    def _friction_model(self, line: Element) -> FrictionModel:
        """Half the spread of resistance and inertance between 0.5 and 2 times the frequency."""
        beta = self.womersley(line) ** 2
        r, i, _, _ = factors(np.array([0.5, 1.0, 2.0]) * beta)
        half_r = 0.5 * abs(r[2] - r[0]) / r[1]
        half_i = 0.5 * abs(i[2] - i[0]) / i[1]
        if half_r < 1e-12:
            return FrictionModel(0.0, 0.0)
        return FrictionModel(float(half_r), float(-half_i / half_r))
