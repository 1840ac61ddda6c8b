"""The transfer functions of a rig in the names of its elements, as plain text and LaTeX.

The same expanded determinants that give the numbers are written with symbols; nothing is
derived a second time.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Any

import sympy

from rigtally.errors import RigError
from rigtally.forms.named import Form
from rigtally.physics.elements import Symbol
from rigtally.physics.expansion import TooLarge, s_power
from rigtally.physics.model import Model
from rigtally.physics.network import FIELD, MASK, Polynomial
from rigtally.physics.rig import Rig

MOST_TERMS = 600  # products of one entry up to which a formula is of use to a reader


@dataclass(frozen=True)
class Line:
    """One formula: what it is of, and how it is written. `expression` is sympy's."""

    name: str
    plain: str
    latex: str
    expression: Any


@dataclass(frozen=True)
class Formula:
    """The formulas of a rig.

    Attributes
    ----------
    entries : tuple of Line
        G(s) of each output over each input.
    parameters : tuple of Line
        Gains and, up to the third order, time constants, ωn and ζ.
    symbols : tuple of (symbol, meaning, value)
        Every symbol with its element and its nominal value in SI.
    """

    title: str
    entries: tuple[Line, ...]
    parameters: tuple[Line, ...]
    symbols: tuple[tuple[str, str, float], ...]

    @property
    def plain(self) -> str:
        """All formulas as text, one a line, then what the symbols are."""
        lines = [f"{line.name} = {line.plain}" for line in (*self.entries, *self.parameters)]
        lines.append("")
        lines.extend(f"{name}: {meaning}, {value:.6g}" for name, meaning, value in self.symbols)
        return "\n".join(lines)

    @property
    def latex(self) -> str:
        """All formulas as LaTeX, one a line."""
        return "\n".join(
            f"{_latex_name(line.name)} = {line.latex}" for line in (*self.entries, *self.parameters)
        )

    def to_dict(self) -> dict[str, Any]:
        """For JSON."""
        return {
            "schema": "rigtally/formula/1",
            "title": self.title,
            "transfer": [{"name": e.name, "plain": e.plain, "latex": e.latex} for e in self.entries],
            "parameters": [{"name": p.name, "plain": p.plain, "latex": p.latex} for p in self.parameters],
            "symbols": [{"symbol": n, "meaning": m, "value": v} for n, m, v in self.symbols],
        }


def formula(rig: Rig) -> Formula:
    """The rig's transfer functions, gains, ωn and ζ in the names of its elements.

    Raises
    ------
    RigError
        What `predict` refuses; code "formula-too-large" where no reader could use it.
    """
    try:
        model = Model(rig)
    except TooLarge:
        raise _too_large(rig) from None
    den, nums = model.transfer.polynomials
    if max(len(den), *(len(p) for row in nums for p in row)) > MOST_TERMS:
        raise _too_large(rig)
    names = _names(model.network.symbols)
    letters = [sympy.Symbol(name) for name in names]
    s = sympy.Symbol("s")
    denominator, numerators = _coefficients(model, den, nums, letters)
    if model.transfer.structure.common:
        denominator, numerators = _without_common(denominator, numerators, s)
    styles = {
        letter: _latex_symbol(symbol, name)
        for letter, symbol, name in zip(letters, model.network.symbols, names, strict=True)
    }

    def line(name: str, expression: Any) -> Line:
        return Line(name, _plain(expression), sympy.latex(expression, symbol_names=styles), expression)

    entries = [
        _entry(
            f"G({model.form.outputs[i]}, {model.form.inputs[j]})", numerators[i][j], denominator, s, styles
        )
        for i, j in model.form.entries
    ]
    values = model.values.symbol_values(model.values.nominal, model.omega)
    meanings = [
        (name, f"{symbol.letter} of {symbol.owner}", float(value))
        for name, symbol, value in zip(names, model.network.symbols, values, strict=True)
    ]
    parameters = [line(name, expression) for name, expression in _named(model.form, denominator, numerators)]
    return Formula(rig.title, tuple(entries), tuple(parameters), tuple(meanings))


def _too_large(rig: Rig) -> RigError:
    return RigError(
        "the formula of this rig has too many terms to be read",
        where=rig.file,
        do="ask for the numbers instead, or leave out elements",
        code="formula-too-large",
    )


def _names(symbols: tuple[Symbol, ...]) -> list[str]:
    """Legible and distinct: letter and element, "R_impulse_line"."""
    out: list[str] = []
    for symbol in symbols:
        base = symbol.letter + "_" + re.sub(r"\W+", "_", symbol.owner).strip("_")
        name, count = base, 1
        while name in out:
            count += 1
            name = f"{base}_{count}"
        out.append(name)
    return out


def _latex_symbol(symbol: Symbol, name: str) -> str:
    owner = re.sub(r"([\\{}_^#$%&~])", r"\\\1", symbol.owner).replace(" ", r"\ ")
    twin = re.search(r"_(\d+)$", name)
    mark = f",{twin.group(1)}" if twin and not symbol.owner.endswith(twin.group(1)) else ""
    return f"{symbol.letter}_{{\\mathrm{{{owner}{mark}}}}}"


def _latex_name(name: str) -> str:
    known = {
        "natural_frequency": r"\omega_n",
        "damping_ratio": r"\zeta",
        "time_constant": r"\tau",
        "gain": "K",
    }
    head, _, rest = name.partition("(")
    escaped = head.replace("_", r"\_")
    inside = re.sub(r"([\\{}_^#$%&~])", r"\\\1", rest.rstrip(")")).replace(" ", r"\ ")
    start = known.get(head, rf"\mathrm{{{escaped}}}")
    return start + (rf"_{{\mathrm{{{inside}}}}}" if rest else "")


def _coefficients(
    model: Model, den: Polynomial, nums: list[list[Polynomial]], letters: list[Any]
) -> tuple[dict[int, Any], list[list[dict[int, Any]]]]:
    """Coefficients by power of s, without the products that every term shares, leading sign positive."""
    count = len(letters)

    def unpacked(poly: Polynomial, divisor: int | None) -> dict[tuple[int, ...], int]:
        out = {}
        for key, number in poly.items():
            exponents = [s_power(key)]
            exponents += [(key >> FIELD * (p + 1)) & MASK for p in range(count)]
            if divisor is not None:
                exponents[divisor + 1] -= 1
            out[tuple(exponents)] = number
        return out

    below = unpacked(den, None)
    above = [[unpacked(p, model.network.output_divisors[i]) for p in row] for i, row in enumerate(nums)]
    everything = [*below.items(), *(item for row in above for p in row for item in p.items())]
    least = [min(e[p + 1] for e, _ in everything) for p in range(count)]
    divisor = math.gcd(*(number for _, number in everything))
    top = max(e[0] for e in below)
    sign = -1 if sum(number for e, number in below.items() if e[0] == top) < 0 else 1

    def by_power(poly: dict[tuple[int, ...], int]) -> dict[int, Any]:
        out: dict[int, Any] = {}
        for exponents, number in poly.items():
            term = sympy.Integer(sign * number // divisor)
            for p, letter in enumerate(letters):
                term *= letter ** (exponents[p + 1] - least[p])
            out[exponents[0]] = out.get(exponents[0], sympy.Integer(0)) + term
        return {power: sympy.factor(value) for power, value in out.items()}

    return by_power(below), [[by_power(p) for p in row] for row in above]


def _without_common(
    denominator: dict[int, Any], numerators: list[list[dict[int, Any]]], s: Any
) -> tuple[dict[int, Any], list[list[dict[int, Any]]]]:
    """The factor that all entries share, divided out."""
    bottom = _polynomial(denominator, s)
    common = sympy.factor(bottom)
    for row in numerators:
        for p in row:
            if p:
                common = sympy.gcd(common, sympy.expand(_polynomial(p, s)))
    if not common.has(s):
        return denominator, numerators

    def divided(p: dict[int, Any]) -> dict[int, Any]:
        if not p:
            return {}
        quotient = sympy.Poly(sympy.cancel(_polynomial(p, s) / common), s)
        return {m[0]: sympy.factor(c) for m, c in quotient.terms() if c != 0}

    return divided(denominator), [[divided(p) for p in row] for row in numerators]


def _polynomial(coefficients: dict[int, Any], s: Any) -> Any:
    """Highest power first, coefficients kept together."""
    terms = [sympy.Mul(c, s**k) for k, c in sorted(coefficients.items(), reverse=True)]
    return sympy.Add(*terms) if terms else sympy.Integer(0)


def _entry(name: str, above: dict[int, Any], below: dict[int, Any], s: Any, styles: dict[Any, str]) -> Line:
    """Numerator over denominator, each by falling powers of s."""
    expression = _polynomial(above, s) / _polynomial(below, s)
    top, bottom = _written(above, _plain, "{}*{}", "s^{}"), _written(below, _plain, "{}*{}", "s^{}")
    plain = top if bottom == "1" else f"{_bracketed(top)}/({bottom})"

    def latex(coefficient: Any) -> str:
        return str(sympy.latex(coefficient, symbol_names=styles))

    top, bottom = _written(above, latex, "{} {}", "s^{{{}}}"), _written(below, latex, "{} {}", "s^{{{}}}")
    return Line(name, plain, top if bottom == "1" else rf"\frac{{{top}}}{{{bottom}}}", expression)


def _written(coefficients: dict[int, Any], write: Any, product: str, power: str) -> str:
    terms: list[str] = []
    for k, c in sorted(coefficients.items(), reverse=True):
        variable = "" if k == 0 else "s" if k == 1 else power.format(k)
        minus = c.could_extract_minus_sign()
        size = -c if minus else c
        text = write(size)
        if variable and size == 1:
            text = variable
        elif variable:
            text = product.format(f"({text})" if size.is_Add else text, variable)
        sign = "-" if minus and not terms else " - " if minus else " + " if terms else ""
        inner = f"({text})" if minus and size.is_Add and not variable else text
        terms.append(sign + inner)
    return "".join(terms) or "0"


def _bracketed(text: str) -> str:
    return f"({text})" if " " in text else text


def _named(
    form: Form, denominator: dict[int, Any], numerators: list[list[dict[int, Any]]]
) -> list[tuple[str, Any]]:
    """Gains of all entries; ωn and ζ, time constants up to the third order."""
    out: list[tuple[str, Any]] = []
    low = form.integrators
    top = form.degree
    a = {k - low: sympy.together(c) for k, c in denominator.items()}
    n = top - low
    zero = sympy.Integer(0)
    for i, j in form.entries:
        suffix = "" if form.single else f"({form.outputs[i]}, {form.inputs[j]})"
        free = form.powers[i][j]
        lead = a[n] if form.is_highpass(i, j) else a[0]
        out.append(("gain" + suffix, _ratio(numerators[i][j][free[0]], lead)))
        if len(free) > 1 and free[1] == free[0] + 1:
            out.append(("zero_time" + suffix, _ratio(numerators[i][j][free[1]], numerators[i][j][free[0]])))
    if n == 1:
        out.append(("time_constant", _ratio(a[1], a[0])))
    elif n == 2:
        out.append(("natural_frequency", _root(_ratio(a[0], a[2]))))
        out.append(("damping_ratio", _root(_ratio(a.get(1, zero) ** 2, 4 * a[0] * a[2]))))
    elif n == 3:
        # τ: the largest real root of a0 τ³ − a1 τ² + a2 τ − a3 = 0, left as a symbol
        tau = sympy.Symbol("tau")
        cubic = a[0] * tau**3 - a.get(1, zero) * tau**2 + a.get(2, zero) * tau - a[3]
        out.append(("0 (largest real root tau is time_constant)", sympy.Add(*cubic.args)))
        natural = sympy.sqrt(_ratio(a[0], a[3]) * tau)
        out.append(("natural_frequency", natural))
        out.append(("damping_ratio", (_ratio(a.get(2, zero), a[3]) - 1 / tau) / (2 * natural)))
    return out


def _ratio(above: Any, below: Any) -> Any:
    return sympy.factor(sympy.cancel(above / below))


def _root(square: Any) -> Any:
    """√square with full squares drawn out (all element values are positive; ζ takes no sign from it)."""
    above, below = sympy.fraction(square)
    outside, inside = sympy.Integer(1), sympy.Integer(1)
    for part, sign in ((above, 1), (below, -1)):
        constant, factors = sympy.factor_list(part)
        whole = sympy.sqrt(constant)
        if whole.is_rational:
            outside *= whole**sign
        else:
            inside *= constant**sign
        for base, power in factors:
            outside *= base ** (sign * (power // 2))
            inside *= base ** (sign * (power % 2))
    numerator, denominator = sympy.fraction(sympy.together(inside))
    root = sympy.sqrt(inside) if numerator != 1 or outside == 1 else 1 / sympy.sqrt(denominator)
    return sympy.together(outside) * root


def _plain(expression: Any) -> str:
    return str(sympy.sstr(expression, order=None)).replace("**", "^")
