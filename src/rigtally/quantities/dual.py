"""Numbers that carry their exact derivative: forward-mode differentiation by name.

A `Dual` is a value and its partial derivatives by named quantities. The formulas of
elements and geometry are written once; called with plain numbers (or arrays) they give
values, called with Duals they give values and exact derivatives.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any


class Dual:
    """value + Σ (∂/∂name) d name. Immutable; arithmetic with plain numbers and Duals."""

    __slots__ = ("partials", "value")
    __array_ufunc__ = None  # numpy numbers and arrays leave the arithmetic to this class

    def __init__(self, value: Any, partials: Mapping[str, Any] | None = None) -> None:
        self.value = value
        self.partials: Mapping[str, Any] = partials or {}

    def scaled(self, value: Any, slope: Any) -> Dual:
        """f(self), given f's value and its slope here (chain rule)."""
        return Dual(value, {name: slope * d for name, d in self.partials.items()})

    def __add__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            return Dual(self.value + other.value, _sum(self, 1.0, other, 1.0))
        return Dual(self.value + other, self.partials)

    __radd__ = __add__

    def __neg__(self) -> Dual:
        return self.scaled(-self.value, -1.0)

    def __sub__(self, other: Any) -> Dual:
        return self.__add__(-1.0 * other)

    def __rsub__(self, other: Any) -> Dual:
        return self.__neg__().__add__(other)

    def __mul__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            return Dual(self.value * other.value, _sum(self, other.value, other, self.value))
        return self.scaled(self.value * other, other)

    __rmul__ = __mul__

    def __truediv__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            quotient = self.value / other.value
            return Dual(quotient, _sum(self, 1.0 / other.value, other, -quotient / other.value))
        return self.scaled(self.value / other, 1.0 / other)

    def __rtruediv__(self, other: Any) -> Dual:
        quotient = other / self.value
        return self.scaled(quotient, -quotient / self.value)

    def __pow__(self, power: float) -> Dual:
        return self.scaled(self.value**power, power * self.value ** (power - 1))

    def __repr__(self) -> str:
        return f"Dual({self.value!r}, {dict(self.partials)!r})"


def value_of(number: Any) -> Any:
    """The value of a Dual, or the plain number itself."""
    return number.value if isinstance(number, Dual) else number


def partials_of(number: Any) -> Mapping[str, Any]:
    """The partial derivatives of a Dual; none of a plain number."""
    return number.partials if isinstance(number, Dual) else {}


def _sum(first: Dual, by_first: Any, second: Dual, by_second: Any) -> dict[str, Any]:
    out = {name: by_first * d for name, d in first.partials.items()}
    for name, d in second.partials.items():
        out[name] = out[name] + by_second * d if name in out else by_second * d
    return out
