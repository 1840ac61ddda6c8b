"""A rig too large for expanded determinants, or of an order beyond polynomials: by its scaled pencil.

Up to order 10 the polynomials are interpolated from the pencil's response and held
against it; above, the rig is reported by its poles, and by the pair of poles that
dominates its step response.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.forms.named import Form, matrix_form
from rigtally.physics.dominant import Dominant, dominant_pair
from rigtally.physics.line_frequency import leading_pole
from rigtally.physics.line_model import LineModel, Solved
from rigtally.physics.modular import modular_structure
from rigtally.physics.network import Network
from rigtally.physics.parameters import parameter_derivative, parameters_from_coefficients
from rigtally.physics.pencil import Modes, Pencil, System
from rigtally.physics.reduction import Reduction
from rigtally.physics.rig import Rig
from rigtally.physics.transfer import Structure, needs_derivative

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
POLYNOMIAL_ORDER = 10  # above it polynomials in s have lost their meaning in double precision
CHECKED = 1e-8  # relative agreement of the polynomials with the pencil's response
ZEROS_UP_TO = 150  # unknowns of the pencil up to which every entry's zeros are computed


@dataclass(frozen=True)
class _State:
    """The pencil at one set of values."""

    pencil: Pencil
    modes: Modes
    seen: NDArray[np.intp]

    @property
    def poles(self) -> ComplexArray:
        return self.modes.poles[self.seen]


class LargeModel(LineModel):
    """The same questions as `Model` answers, by eigenvalues."""

    def __init__(self, rig: Rig, network: Network) -> None:
        super().__init__(rig, network)
        self.system = System(network)
        self.settle_lines()
        state = self._state(self.values.nominal, self.omega)
        hidden = np.setdiff1d(np.arange(state.modes.poles.size), state.seen)
        removed = tuple(complex(p) for p in state.modes.poles[hidden])
        self.dominant: Dominant | None = None
        self.structure: Structure | None = None
        if self.system.order <= POLYNOMIAL_ORDER + hidden.size:
            self.structure = modular_structure(
                *self.system.equations,
                len(network.columns),
                self.system.inputs,
                len(network.symbols),
                self.system.order,
                self.system.shifts.tolist(),
            )
        if self.structure is not None and self.structure.degree <= POLYNOMIAL_ORDER:
            self.form = self._form_of(self.structure)
            self._check(state)
        else:
            self.structure = None
            self.dominant = dominant_pair(state.pencil, state.modes, state.seen)
            self.form = self._dominant_form(self.dominant)
        self.reduction = Reduction(0, 0, self.form.powers, self.form.degree, self.form.integrators, removed)
        self._nominal = state

    def frequency(self, values: Array, omega: Any) -> Array:
        """|p| of the leading pole."""
        if values.ndim > 1:
            rows = zip(values, np.broadcast_to(omega, values.shape[:1]), strict=True)
            return np.array([float(self.frequency(v, w)) for v, w in rows])
        poles = self._state(values, float(omega)).poles
        lead = leading_pole(poles)
        return np.asarray(abs(poles[lead]) if lead is not None else math.nan)

    def _state(self, values: Array, omega: float) -> _State:
        pencil = Pencil(self.system, self.values.symbol_values(values, omega))
        modes = pencil.modes()
        return _State(pencil, modes, np.flatnonzero(pencil.seen(modes)))

    def _moving(self, state: _State, structure: Structure) -> NDArray[np.intp]:
        """Modes of the poles that are not at zero; as many as the structure says.

        Raises
        ------
        RigError
            code "poles-unclear": more or fewer are found.
        """
        size = np.abs(state.modes.poles)
        tiny = 1e-9 * np.median(size[size > 0]) if np.any(size > 0) else 0.0
        found = np.array([k for k in state.seen if size[k] > tiny], dtype=np.intp)
        if found.size != structure.degree - structure.integrators:
            raise RigError(
                f"{found.size} poles were found where the structure has "
                f"{structure.degree - structure.integrators}: some all but cancel",
                where=self.rig.file,
                do="leave out elements that act far from the frequencies of interest",
                code="poles-unclear",
            )
        return found

    def _polynomials(self, state: _State) -> tuple[Array, Array]:
        """Monic denominator and numerators, interpolated on a circle of the poles' mean size."""
        structure = self._structure()
        poles = state.modes.poles[self._moving(state, structure)]
        den = np.zeros(structure.degree + 1)
        den[structure.integrators :] = np.atleast_1d(np.real(np.poly(poles)))[::-1]
        points = _circle(poles, structure.degree)
        whole = points**structure.integrators * np.prod(points[:, None] - poles[None, :], axis=1)
        values = state.pencil.response(points) * whole[:, None, None]
        return den, self._kept(_interpolate(values, points))

    def _kept(self, numerators: Array) -> Array:
        """Coefficients that the structure has; the others are zero."""
        out = np.zeros_like(numerators)
        for i, row in enumerate(self._structure().powers):
            for j, free in enumerate(row):
                out[..., i, j, list(free)] = numerators[..., i, j, list(free)]
        return out

    def _structure(self) -> Structure:
        if self.structure is None:
            raise RigError(
                "the order is too high for polynomials", where=self.rig.file, code="order-too-high"
            )
        return self.structure

    def _form_of(self, structure: Structure) -> Form:
        self.refuse_unmoved(structure.powers)
        for reading, row in zip(self.rig.readings, structure.powers, strict=True):
            for drive, free in zip(self.rig.drives, row, strict=True):
                if free and free[-1] > structure.degree:
                    raise needs_derivative(self.rig, reading, drive)
        return matrix_form(
            [r.name for r in self.rig.readings],
            [d.name for d in self.rig.drives],
            structure.powers,
            structure.degree - structure.integrators,
            integrators=structure.integrators,
        )

    def _dominant_form(self, dominant: Dominant) -> Form:
        power = dominant.power
        powers = [[(power[i][j],) if live else () for j, live in enumerate(row)] for i, row in
                  enumerate(dominant.live)]  # fmt: skip
        self.refuse_unmoved(powers)
        return matrix_form([r.name for r in self.rig.readings], [d.name for d in self.rig.drives], powers, 2)

    def _check(self, state: _State) -> None:
        """The polynomials give the pencil's response at frequencies between and beyond the poles."""
        den, nums = self._polynomials(state)
        sizes = np.abs(state.poles[np.abs(state.poles) > 0])
        low, high = (sizes.min(), sizes.max()) if sizes.size else (1.0, 1.0)
        s = np.asarray(1j * np.geomspace(0.3 * low, 3.0 * high, 7), dtype=np.complex128)
        powers = s[:, None] ** np.arange(den.size)
        mine = np.einsum("mk,qrk->mqr", powers, nums) / (powers @ den)[:, None, None]
        theirs = state.pencil.response(s)
        error = (np.abs(mine - theirs).max(axis=0) / np.maximum(np.abs(theirs).max(axis=0), 1e-300)).max(
            where=np.array([[bool(free) for free in row] for row in self._structure().powers]), initial=0.0
        )
        if not error < CHECKED:
            raise RigError(
                f"the polynomials of this rig (order {den.size - 1}) lose {error:.1e} of its response",
                where=self.rig.file,
                do="the element values span too much for polynomials; leave out elements that act far from "
                "the frequencies of interest",
                code="polynomials-fail",
            )

    def entries_report(self) -> list[dict[str, Any]]:
        """Zeros (up to a size at which they are cheap), low-frequency power of s and share of each entry."""
        if self.dominant is None:
            return []
        out = []
        for i, j in self.form.entries:
            cheap = self.system.size <= ZEROS_UP_TO
            zeros = self._nominal.pencil.zeros(i, j) if cheap else None
            out.append(
                {
                    "output": self.form.outputs[i],
                    "input": self.form.inputs[j],
                    "zeros": zeros,
                    "power": self.dominant.power[i][j],
                    "share": float(self.dominant.share[i, j]),
                }
            )
        return out

    def evaluate(self, values: Array) -> Array:
        """(v,) values -> (p,) parameters, re-solved; NaN where the values make no such rig."""
        nothing = np.full(len(self.form.names), np.nan)
        try:
            with np.errstate(all="ignore"):
                theta = self._theta(np.asarray(values, dtype=float))
        except (RigError, ArithmeticError, ValueError, np.linalg.LinAlgError):
            return nothing
        return theta if np.all(np.isfinite(theta)) else nothing

    def evaluate_many(self, values: Array) -> Array:
        """(m, v) values -> (m, p) parameters."""
        return np.array([self.evaluate(row) for row in values])

    def _theta(self, values: Array) -> Array:
        state = self._state(values, self.solve_omega(values, self.omega))
        if self.dominant is not None:
            return self.dominant.again(state.pencil, state.modes).theta(self.form)
        return parameters_from_coefficients(self.form, *self._polynomials(state))

    def solve(self, values: Array | None = None) -> Solved:
        """Everything at (v,) values (the nominal ones unless stated), with exact derivatives."""
        x = self.values.nominal if values is None else np.asarray(values, dtype=float)
        omega = self.omega if values is None else self.solve_omega(x, self.omega)
        _, by_values, by_omega = self.values.symbol_derivatives(x, omega)
        state = self._state(x, omega)
        by_poles = state.pencil.pole_derivative(state.modes, state.seen)  # (P, poles)
        by_symbol = by_values
        if self.values.oscillating:
            lead = leading_pole(state.poles)
            along = (np.conj(state.poles[lead]) * by_poles[:, lead]).real / omega
            slope = (along @ by_values) / (1.0 - along @ by_omega)
            by_symbol = by_values + np.outer(by_omega, slope)
        d_poles = by_symbol.T @ by_poles  # (v, poles)
        if self.dominant is not None:
            return self._solve_dominant(state, by_symbol, d_poles, omega)
        structure = self._structure()
        moving = self._moving(state, structure)
        poles = state.modes.poles[moving]
        d_poles = by_symbol.T @ state.pencil.pole_derivative(state.modes, moving)
        den, nums = self._polynomials(state)
        low = structure.integrators
        d_den = np.zeros((d_poles.shape[0], den.size))
        for k in range(poles.size):
            rest = np.atleast_1d(np.poly(np.delete(poles, k)))[::-1]
            d_den[:, low : low + rest.size] -= np.real(np.outer(d_poles[:, k], rest))
        points = _circle(poles, structure.degree)
        slopes = np.zeros((points.size, d_poles.shape[0], *nums.shape[:2]), dtype=np.complex128)
        for m, s in enumerate(points):
            gain, by = state.pencil.response_derivative(complex(s))
            whole = s**low * np.prod(s - poles)
            d_whole = -whole * (d_poles @ (1.0 / (s - poles)))
            slopes[m] = np.tensordot(by_symbol.T, by, axes=1) * whole + d_whole[:, None, None] * gain
        d_num = self._kept(_interpolate(slopes, points))
        theta = parameters_from_coefficients(self.form, den, nums)
        sensitivity = parameter_derivative(self.form, theta, d_den, d_num)
        at_zero = np.zeros(low, dtype=np.complex128)
        d_zero = np.zeros((low, d_poles.shape[0]), dtype=np.complex128)
        return Solved(
            omega, den, nums, d_den, d_num, theta, sensitivity,
            np.concatenate([at_zero, poles]), np.vstack([d_zero, d_poles.T]),
        )  # fmt: skip

    def _solve_dominant(self, state: _State, by_symbol: Array, d_poles: ComplexArray, omega: float) -> Solved:
        """Coefficients of the dominant second order, with derivatives by those of its parameters."""
        if self.dominant is None:
            raise RigError("the rig has no dominant pair", where=self.rig.file, code="no-dominant-pair")
        found = self.dominant.again(state.pencil, state.modes)
        form = self.form
        theta = found.theta(form)
        sensitivity = found.sensitivity(form, state.pencil, state.modes, by_symbol)
        count = form.numerator_count
        den, d_shared = form.denominator(theta[count:])
        b, d_b = form.numerator_coefficients(theta)
        nums = np.zeros((len(form.outputs), len(form.inputs), form.degree + 1))
        d_nums = np.zeros((sensitivity.shape[1], *nums.shape))
        for value, slope, (i, j, power) in zip(b, d_b.T, form.numerator_slots, strict=True):
            nums[i, j, power] = value
            d_nums[:, i, j, power] = sensitivity.T @ slope
        d_den = sensitivity[count:].T @ d_shared
        return Solved(omega, den, nums, d_den, d_nums, theta, sensitivity, state.poles, d_poles.T)


def _circle(poles: ComplexArray, order: int) -> ComplexArray:
    """order + 1 points on a circle of the poles' mean size, turned so that none comes near a pole."""
    sizes = np.abs(poles[np.abs(poles) > 0])
    radius = float(np.exp(np.mean(np.log(sizes)))) if sizes.size else 1.0
    best = (-1.0, np.zeros(0, dtype=np.complex128))
    for turn in (0.05, 0.13, 0.21, 0.29, 0.37, 0.45):
        points = radius * np.exp(2j * math.pi * (np.arange(order + 1) + turn) / (order + 1))
        nearest = float(np.abs(points[:, None] - poles[None, :]).min()) if poles.size else radius
        if nearest > best[0]:
            best = (nearest, points)
    return best[1]


def _interpolate(values: ComplexArray, points: ComplexArray) -> Array:
    """Real coefficients (…, m) of polynomials from their values (m, …) at m points on a circle about 0."""
    k = np.arange(points.size)
    inverse = points[None, :] ** -k[:, None].astype(float) / points.size
    out: Array = np.moveaxis(np.tensordot(inverse, values, axes=1), 0, -1).real
    return out
