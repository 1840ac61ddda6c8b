"""A rig as a function: values in, coefficients and parameters out, without linearising."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.forms.named import Form, form, matrix_form
from rigtally.physics.expansion import expand
from rigtally.physics.line_frequency import leading_frequency, leading_pole
from rigtally.physics.line_model import LineModel, Solved
from rigtally.physics.network import Network, assemble
from rigtally.physics.parameters import (
    parameter_derivative,
    parameters_from_coefficients,
    roots_with_derivative,
)
from rigtally.physics.reduction import Reduction
from rigtally.physics.rig import Rig
from rigtally.physics.transfer import Transfer

Array = NDArray[np.float64]
FROM_RIG = "from-rig"


class Model(LineModel):
    """The network of a rig, expanded once, evaluated many times."""

    def __init__(self, rig: Rig, network: Network | None = None) -> None:
        super().__init__(rig, network or assemble(rig))
        expansion = expand(self.network)
        start = self.values.symbol_values(self.values.nominal, 1.0)
        self.transfer = Transfer(self.network, expansion, start)
        self.settle_lines()
        nominal = self.values.symbol_values(self.values.nominal, self.omega)
        den, nums = self.transfer.values(nominal)
        self.reduction = Reduction.found(self.transfer.structure, den, nums)
        self.form = self._form()

    def _form(self) -> Form:
        powers = self.reduction.powers
        self.refuse_unmoved(powers)
        own = matrix_form(
            [r.name for r in self.rig.readings],
            [d.name for d in self.rig.drives],
            powers,
            self.reduction.degree - self.reduction.integrators,
            integrators=self.reduction.integrators,
        )
        return self._stated_form(own)

    def _stated_form(self, own: Form) -> Form:
        """The form that [fit] states, where it holds the network's powers of s; else the network's own."""
        name = str(self.rig.fit.get("form") or FROM_RIG)
        if name in (FROM_RIG, "any", own.name) or not own.single:
            return own
        stated = form(name, output=own.outputs[0], inputs=own.inputs[0])
        mine, theirs = own.powers[0][0], stated.powers[0][0]
        same_low = stated.family == "rational" or mine[0] == theirs[0]
        if own.integrators or stated.order != own.order or not set(mine) <= set(theirs) or not same_low:
            return own
        return stated

    def coefficients(self, values: Array, omega: float | None = None) -> tuple[Array, Array]:
        """Monic denominator (n + 1,) and numerators (q, r, n + 1) at (v,) values."""
        if omega is None:
            omega = self.solve_omega(values, self.omega)
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
            omega = self.solve_omega(draws, self.omega)
            symbols = self.values.symbol_values(draws, omega)
            den, nums = self.reduction.apply(*self.transfer.values(symbols))
            return parameters_from_coefficients(self.form, den, nums)

    def solve(self, values: Array | None = None) -> Solved:
        """Everything at (v,) values (the nominal ones unless stated), with exact derivatives."""
        x = self.values.nominal if values is None else np.asarray(values, dtype=float)
        omega = self.omega if values is None else self.solve_omega(x, self.omega)
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

    def frequency(self, values: Array, omega: Any) -> Array:
        """|p| of the leading pole at (…, v) values with the lines taken at omega."""
        den, _ = self.transfer.values(self.values.symbol_values(values, omega))
        return leading_frequency(den)

    def _omega_derivative(self, raw: Any, by_values: Array, by_omega: Array, omega: float) -> Array:
        """(v,) dω by the values: implicit differentiation of ω = |p(values, ω)|."""
        d_den = np.vstack([by_values.T @ raw.by_denominator, by_omega @ raw.by_denominator])
        poles, by = roots_with_derivative(raw.denominator, d_den)
        lead = leading_pole(poles)
        slope = (np.conj(poles[lead]) * by[lead]).real / omega
        out: Array = slope[:-1] / (1.0 - slope[-1])
        return out
