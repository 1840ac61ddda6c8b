"""The named forms: which transfer functions are meant, their parameters, exact derivatives.

A form is one denominator and, for each output and input, the powers of s that the
numerator may have. The single-entry forms of the design page are made by `form(name)`;
several inputs and outputs by `matrix_form(...)`.

With the (monic) denominator s^i·(a0 + a1 s + … + s^n), i integrators, an entry whose
lowest free numerator power is p has the gain K = b_p / a0. The second-order highpass
is the exception: there K = b_2, the gain far above ωn.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import UsageError
from rigtally.forms.transfer_matrix import TransferMatrix
from rigtally.quantities import units

Array = NDArray[np.float64]

_SHARED = {
    "first-order": ("time_constant",),
    "second-order": ("natural_frequency", "damping_ratio"),
    "third-order": ("time_constant", "natural_frequency", "damping_ratio"),
}
_ORDER = {"first-order": 1, "second-order": 2, "third-order": 3}

# name: (family, numerator powers)
SINGLE_FORMS: dict[str, tuple[str, tuple[int, ...]]] = {
    "first-order": ("first-order", (0,)),
    "first-order-rate": ("first-order", (1,)),
    "second-order": ("second-order", (0,)),
    "second-order-rate": ("second-order", (1,)),
    "second-order-zero": ("second-order", (0, 1)),
    "second-order-highpass": ("second-order", (2,)),
    "third-order": ("third-order", (0,)),
    "third-order-rate": ("third-order", (1,)),
}
_RATIONAL = re.compile(r"^rational-([0-6])/([1-6])$")


@dataclass(frozen=True)
class Form:
    """A family of transfer functions.

    Attributes
    ----------
    name : str
        "second-order", "rational-1/2", …; "matrix" for several entries.
    family : str
        "first-order", "second-order", "third-order" or "rational": how the denominator is written.
    order : int
        Degree of the denominator without its integrators.
    powers : nested tuples, [output][input] -> powers of s
        Which numerator coefficients are free; () is an entry that is zero.
    integrators : int
        Poles fixed at s = 0.
    dead_time : bool
        One dead time for all entries.
    outputs, inputs : tuple of str
    """

    name: str
    family: str
    order: int
    powers: tuple[tuple[tuple[int, ...], ...], ...]
    integrators: int = 0
    dead_time: bool = False
    outputs: tuple[str, ...] = ("output",)
    inputs: tuple[str, ...] = ("input",)

    @property
    def single(self) -> bool:
        """One output and one input."""
        return len(self.outputs) == len(self.inputs) == 1

    @property
    def degree(self) -> int:
        """Degree of the denominator with its integrators."""
        return self.order + self.integrators

    @property
    def feedthrough(self) -> bool:
        """Whether some entry passes its input straight through."""
        return any(self.degree in entry for row in self.powers for entry in row)

    def is_highpass(self, output: int, inputs: int) -> bool:
        """Whether the entry's gain is the one far above ωn."""
        return (
            self.family == "second-order"
            and self.powers[output][inputs] == (self.degree,)
            and self.degree == 2
        )

    @cached_property
    def entries(self) -> tuple[tuple[int, int], ...]:
        """(output, input) pairs with at least one free coefficient, row by row."""
        return tuple((i, j) for i, row in enumerate(self.powers) for j, entry in enumerate(row) if entry)

    @cached_property
    def numerator_slots(self) -> tuple[tuple[int, int, int], ...]:
        """(output, input, power) of each free numerator coefficient, in parameter order."""
        return tuple((i, j, p) for i, j in self.entries for p in self.powers[i][j])

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Parameter names: entries first, then the denominator, then dead time."""
        out: list[str] = []
        for i, j, power in self.numerator_slots:
            suffix = "" if self.single else f"({self.outputs[i]}, {self.inputs[j]})"
            place = self.powers[i][j].index(power)
            if self.family == "rational" and self.single:
                out.append(f"b{power}")
            elif place == 0:
                out.append("gain" + suffix)
            elif power == self.powers[i][j][0] + 1:
                out.append("zero_time" + suffix)
            else:
                out.append(f"b{power}/b{self.powers[i][j][0]}" + suffix)
        out.extend(self.shared_names)
        if self.dead_time:
            out.append("dead_time")
        return tuple(out)

    @property
    def shared_names(self) -> tuple[str, ...]:
        """Names of the denominator's parameters."""
        if self.family == "rational":
            return tuple(f"a{k}" for k in range(self.order))
        return _SHARED[self.family]

    @property
    def numerator_count(self) -> int:
        """How many free numerator coefficients there are (they come first)."""
        return len(self.numerator_slots)

    @cached_property
    def time_powers(self) -> Array:
        """Power of time in each parameter: value = scaled value * (time scale)**power."""
        out: list[float] = []
        for i, j, power in self.numerator_slots:
            first = self.powers[i][j][0]
            if self.family == "rational" and self.single:
                out.append(power - self.degree)
            elif power == first:
                out.append(0.0 if self.is_highpass(i, j) else first - self.integrators)
            else:
                out.append(power - first)
        each = {"time_constant": 1.0, "natural_frequency": -1.0, "damping_ratio": 0.0}
        for k, name in enumerate(self.shared_names):
            out.append(each[name] if name in each else float(k - self.order))
        if self.dead_time:
            out.append(1.0)
        return np.array(out)

    def units(self, output_units: Sequence[str], input_units: Sequence[str]) -> tuple[str, ...]:
        """SI-coherent unit of each parameter, given those of the outputs and inputs."""
        out: list[str] = []
        for name, power, slot in zip(
            self.names, self.time_powers, [*self.numerator_slots, *[None] * 99], strict=False
        ):
            whole = round(float(power))
            if slot is not None and (name.startswith("gain") or re.fullmatch(r"b\d", name)):
                out.append(units.ratio(output_units[slot[0]], input_units[slot[1]], whole))
            elif name == "natural_frequency":
                out.append("rad/s")
            elif whole == 0:
                out.append("")
            else:
                out.append(
                    "s"
                    if whole == 1
                    else f"1/s^{-whole}"
                    if whole < -1
                    else "1/s"
                    if whole == -1
                    else f"s^{whole}"
                )
        return tuple(out)

    def denominator(self, shared: Array) -> tuple[Array, Array]:
        """Monic denominator without integrators, ascending, and its derivative.

        Parameters
        ----------
        shared : (k,) array
            The denominator's parameters, in the order of `shared_names`.

        Returns
        -------
        (n + 1,) coefficients, (k, n + 1) derivatives
        """
        if self.family == "first-order":
            (tau,) = shared
            return np.array([1.0 / tau, 1.0]), np.array([[-1.0 / tau**2, 0.0]])
        if self.family == "second-order":
            w, z = shared
            return (
                np.array([w * w, 2.0 * z * w, 1.0]),
                np.array([[2.0 * w, 2.0 * z, 0.0], [0.0, 2.0 * w, 0.0]]),
            )
        if self.family == "third-order":
            tau, w, z = shared
            r = 1.0 / tau
            value = np.array([r * w * w, w * w + 2.0 * z * w * r, r + 2.0 * z * w, 1.0])
            by_r = np.array([w * w, 2.0 * z * w, 1.0, 0.0])
            by_w = np.array([2.0 * r * w, 2.0 * w + 2.0 * z * r, 2.0 * z, 0.0])
            by_z = np.array([0.0, 2.0 * w * r, 2.0 * w, 0.0])
            return value, np.array([-by_r * r * r, by_w, by_z])
        value = np.append(shared, 1.0)
        return value, np.eye(self.order, self.order + 1)

    def split(self, theta: Array) -> tuple[Array, Array, float]:
        """(entry parameters, denominator parameters, dead time) of a parameter vector."""
        k = self.numerator_count
        m = k + len(self.shared_names)
        return theta[:k], theta[k:m], float(theta[m]) if self.dead_time else 0.0

    def numerator_coefficients(self, theta: Array) -> tuple[Array, Array]:
        """Free numerator coefficients b (in slot order) and their derivative.

        Returns
        -------
        (k,) coefficients, (p, k) derivatives by all parameters
        """
        entry, shared, _ = self.split(theta)
        k = self.numerator_count
        b = np.zeros(k)
        by = np.zeros((theta.size, k))
        if self.family == "rational" and self.single:
            b[:] = entry
            by[:k, :k] = np.eye(k)
            return b, by
        den, dden = self.denominator(shared)
        a0, da0 = den[0], dden[:, 0]
        first = 0
        for c, (i, j, power) in enumerate(self.numerator_slots):
            high = self.is_highpass(i, j)
            if power == self.powers[i][j][0]:
                first = c
                scale = 1.0 if high else a0
                b[c] = entry[c] * scale
                by[c, c] = scale
                if not high:
                    by[k : k + shared.size, c] = entry[c] * da0
            else:
                b[c] = entry[c] * b[first]
                by[:, c] = entry[c] * by[:, first]
                by[c, c] += b[first]
        return b, by

    def parameters_from(self, b: Array, shared: Array, dead_time: float = 0.0) -> Array:
        """Parameter vector from free numerator coefficients and denominator parameters."""
        entry = np.array(b, dtype=float)
        if not (self.family == "rational" and self.single):
            a0 = self.denominator(shared)[0][0]
            first = 0
            for c, (i, j, power) in enumerate(self.numerator_slots):
                if power == self.powers[i][j][0]:
                    first = c
                    entry[c] = b[c] if self.is_highpass(i, j) else b[c] / a0
                else:
                    entry[c] = b[c] / b[first] if b[first] != 0.0 else np.nan
        tail = [dead_time] if self.dead_time else []
        return np.concatenate([entry, shared, tail])

    def shared_from(self, denominator: Array) -> Array:
        """Denominator parameters from monic ascending coefficients (without integrators).

        Real poles of a second-order part give a damping ratio of 1 or more. A pole
        in the right half plane is kept (negative time constant or damping ratio);
        NaN where the family cannot hold it (a saddle: one real pole on each side).
        """
        den = np.asarray(denominator, dtype=float)
        if self.family == "rational":
            return den[:-1].copy()
        if self.family == "first-order":
            return np.array([1.0 / den[0]])
        if self.family == "second-order":
            w = np.sqrt(den[0]) if den[0] > 0 else np.nan
            return np.array([w, den[1] / (2.0 * w)])
        roots = np.roots(den[::-1])
        real = roots[np.abs(roots.imag) <= 1e-9 * np.abs(roots)].real
        lone = real[np.argmin(np.abs(real))] if real.size else np.nan
        # what is left after the lone real pole is divided out
        middle = den[2] + lone
        last = -den[0] / lone
        w = np.sqrt(last) if last > 0 else np.nan
        return np.array([-1.0 / lone, w, middle / (2.0 * w)])

    def transfer_matrix(self, theta: Array) -> TransferMatrix:
        """The transfer matrix that a parameter vector stands for."""
        theta = np.asarray(theta, dtype=float)
        _, shared, dead = self.split(theta)
        den = np.concatenate([np.zeros(self.integrators), self.denominator(shared)[0]])
        b, _ = self.numerator_coefficients(theta)
        num = np.zeros((len(self.outputs), len(self.inputs), self.degree + 1))
        for value, (i, j, power) in zip(b, self.numerator_slots, strict=True):
            num[i, j, power] = value
        return TransferMatrix(
            num, den, np.full((len(self.outputs), len(self.inputs)), dead), self.outputs, self.inputs
        )

    def with_names(self, outputs: Sequence[str], inputs: Sequence[str]) -> Form:
        """The same form between other channels."""
        return replace(self, outputs=tuple(outputs), inputs=tuple(inputs))

    def with_dead_time(self, dead_time: bool = True) -> Form:
        """The same form with (or without) a dead time."""
        return replace(self, dead_time=dead_time)


def form(name: str, *, dead_time: bool = False, output: str = "output", inputs: str = "input") -> Form:
    """The named single-entry form.

    Raises
    ------
    UsageError
        code "unknown-form", with the names there are.
    """
    found = _RATIONAL.match(name)
    if found:
        m, n = int(found.group(1)), int(found.group(2))
        if m <= n:
            return Form(name, "rational", n, ((tuple(range(m + 1)),),), 0, dead_time, (output,), (inputs,))
    if name not in SINGLE_FORMS:
        known = ", ".join([*SINGLE_FORMS, "rational-m/n (m ≤ n ≤ 6)"])
        raise UsageError(f"form {name!r} is not known", do=f"choose one of: {known}", code="unknown-form")
    family, powers = SINGLE_FORMS[name]
    return Form(name, family, _ORDER[family], ((powers,),), 0, dead_time, (output,), (inputs,))


def matrix_form(
    outputs: Sequence[str],
    inputs: Sequence[str],
    powers: Sequence[Sequence[Sequence[int]]],
    order: int,
    *,
    integrators: int = 0,
    dead_time: bool = False,
) -> Form:
    """A form from powers of s, named if one of the single-entry forms is meant.

    `order` counts the poles that are not at zero. Up to third order the
    denominator is written in time constants, ωn and ζ; beyond it by coefficients.
    """
    cells = tuple(tuple(tuple(sorted(entry)) for entry in row) for row in powers)
    family = {1: "first-order", 2: "second-order", 3: "third-order"}.get(order, "rational")
    name = "matrix"
    if len(outputs) == len(inputs) == 1:
        named = [
            key for key, value in SINGLE_FORMS.items() if value == (family, cells[0][0]) and not integrators
        ]
        entry = cells[0][0]
        if named:
            name = named[0]
        elif not integrators and 1 <= order <= 6 and entry == tuple(range(len(entry))):
            name, family = f"rational-{len(entry) - 1}/{order}", "rational"
    return Form(name, family, order, cells, integrators, dead_time, tuple(outputs), tuple(inputs))
