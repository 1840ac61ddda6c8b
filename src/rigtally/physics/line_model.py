"""What every model of a rig shares: its values, and the frequency at which its lines are taken."""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rigtally.errors import RigError
from rigtally.forms.named import Form
from rigtally.physics.line_frequency import solve_frequency
from rigtally.physics.network import Network
from rigtally.physics.oscillating_line import factors, womersley_number
from rigtally.physics.reduction import Reduction
from rigtally.physics.rig import Element, Rig
from rigtally.physics.rig_values import FrictionModel, RigValues

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


class LineModel(ABC):
    """Rig, network and values; the oscillating lines' own frequency.

    `form` and `reduction` are set by the subclass.
    """

    form: Form
    reduction: Reduction
    omega: float

    def __init__(self, rig: Rig, network: Network) -> None:
        self.rig = rig
        self.network = network
        self.values = RigValues(rig, network.symbols)

    def settle_lines(self) -> None:
        """Find the nominal frequency of the lines and their model uncertainty there."""
        self.omega = self.solve_omega(self.values.nominal, None)
        for line in self.values.oscillating:
            self.values.friction[line.name] = self._friction_model(line)

    @abstractmethod
    def frequency(self, values: Array, omega: Any) -> Array:
        """|p| of the leading pole at (…, v) values with the lines taken at omega."""

    @abstractmethod
    def evaluate(self, values: Array) -> Array:
        """(v,) values -> (p,) parameters, re-solved; NaN where the values make no such rig."""

    @abstractmethod
    def evaluate_many(self, values: Array) -> Array:
        """(m, v) values -> (m, p) parameters."""

    @abstractmethod
    def solve(self, values: Array | None = None) -> Solved:
        """Everything at (v,) values (the nominal ones unless stated), with exact derivatives."""

    def differentiate(self, values: Array) -> Array:
        """(v,) values -> (p, v) exact derivative there; NaN where the values make no such rig."""
        try:
            with np.errstate(all="ignore"):
                return self.solve(np.asarray(values, dtype=float)).sensitivity
        except (RigError, ArithmeticError, ValueError, np.linalg.LinAlgError):
            return np.full((len(self.form.names), len(self.values.input_names)), np.nan)

    def solve_omega(self, values: Array, start: float | None) -> Any:
        """The lines' frequency at (v,) or (m, v) values: a float or (m,); NaN where there is no such line."""
        single = values.ndim == 1
        if not self.values.oscillating:
            return math.nan if single else np.full(values.shape[0], math.nan)
        first = self.frequency(values, 0.0) if start is None else start
        if single:

            def at(omega: Array) -> Array:
                return np.atleast_1d(self.frequency(values, float(omega[0])))

            return float(solve_frequency(at, np.array([float(first)]), self.rig.file)[0])
        begin = np.broadcast_to(first, values.shape[:1]).astype(float)
        return solve_frequency(lambda w: self.frequency(values, w), begin, self.rig.file)

    def refuse_unmoved(self, powers: Sequence[Sequence[Sequence[int]]]) -> None:
        """Every reading must be moved by some drive.

        Raises
        ------
        RigError
            code "unmoved-reading".
        """
        for reading, row in zip(self.rig.readings, powers, strict=True):
            if not any(row):
                raise RigError(
                    f"no drive moves reading {reading.name!r}",
                    where=self.rig.file,
                    do="connect it to a drive through elements, or leave it out",
                    code="unmoved-reading",
                )

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
