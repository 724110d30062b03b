"""Expressions as a list of operations over numbers, with common subexpressions computed once.

A tape holds the values of some expressions and all their exact derivatives, so that a written-out law costs
a fraction of a microsecond for each distinct operation in it. What is differentiated is the list itself,
operation by operation (forward mode; Griewank & Walther, Evaluating Derivatives, SIAM 2008), so that the
derivatives are those of the numbers that are computed, near zero too (see `powers`).
"""

from __future__ import annotations

import math
import operator
from collections.abc import Callable, Sequence

from kinetics_db.engine.network.syntax import (
    Binary,
    Call,
    Concentration,
    Expression,
    Negation,
    Number,
    Parameter,
    Temperature,
    parameters_of,
    species_of,
    uses_temperature,
)
from kinetics_db.engine.simulation.powers import (
    SMALLEST_BASE,
    power,
    power_by_exponent,
    reach,
    root,
    root_by_exponent,
    slope_of_power,
    slope_of_root,
)

SMALLEST_DIVISOR = 1e-15
"""Stands for a zero denominator in a derivative."""

Function = Callable[[float, float], float]
Operation = tuple[Function, int, int]


def _minus(a: float, _: float) -> float:
    return -a


def _exp(a: float, _: float) -> float:
    return math.exp(a)


def _log(a: float, _: float) -> float:
    return math.log(a)


def _divide_in_derivative(a: float, b: float) -> float:
    return a / (b if b != 0.0 else SMALLEST_DIVISOR)


def _by_base(a: float, b: float) -> float:
    return b * slope_of_power(a, b) if b != 0.0 else 0.0


def _root_by_base(a: float, b: float) -> float:
    return b * slope_of_root(a, b) if b != 0.0 else 0.0


_FUNCTIONS: dict[str, Function] = {
    "+": operator.add,
    "-": operator.sub,
    "*": operator.mul,
    "/": operator.truediv,
    "^": power,
    "minus": _minus,
    "exp": _exp,
    "log": _log,
    "reach": reach,
    "root": root,
    "/ in derivative": _divide_in_derivative,
    "^ by base": _by_base,
    "^ by exponent": power_by_exponent,
    "root by base": _root_by_base,
    "root by exponent": root_by_exponent,
}


class Tape:
    """Values and derivatives of expressions at one point.

    Attributes
    ----------
    outputs : int, number of expressions
    species_entries, name_entries : tuple of (expression, position)
        Which derivatives follow the values, by position in `species` and in `names`.
    uses_temperature : bool
    roots : tuple of Expression
        Bases that hold a concentration and may stand in a power between 0 and 1; each needs a width.
    """

    def __init__(
        self, expressions: Sequence[Expression], *, species: Sequence[str], names: Sequence[str]
    ) -> None:
        self.outputs = len(expressions)
        self.uses_temperature = any(uses_temperature(e) for e in expressions)
        at_species = {name: i for i, name in enumerate(species)}
        at_names = {name: i for i, name in enumerate(names)}
        by_species = [(n, at_species[s]) for n, e in enumerate(expressions) for s in species_of(e)]
        by_names = [(n, at_names[s]) for n, e in enumerate(expressions) for s in parameters_of(e)]
        self.species_entries = tuple(by_species)
        self.name_entries = tuple(by_names)
        writer = _Writer(at_species, at_names)
        self._values = [writer.place(e) for e in expressions]
        self._short = len(writer.operations)  # values need no more than these
        variables = [(n, ("input", i)) for n, i in by_species]
        variables += [(n, ("input", len(species) + i)) for n, i in by_names]
        zero = writer.number(0.0)
        slopes = [writer.slope(self._values[n], variable) or zero for n, variable in variables]
        self._all = self._values + slopes
        self._operations = writer.operations
        self._numbers = writer.numbers
        self.roots = tuple(writer.roots)
        self._bases = Tape(self.roots, species=species, names=names) if self.roots else None
        self._inputs = len(species) + len(names) + 1 + len(self.roots)
        # numbers stand between the inputs and the results, which are known only now
        shift = len(writer.numbers)
        self._resolve(shift)

    def _resolve(self, shift: int) -> None:
        """Turn the writer's addresses into positions: inputs, then numbers, then results."""
        n = self._inputs

        def position(address: tuple[str, int]) -> int:
            kind, index = address
            return {"input": 0, "number": n, "result": n + shift}[kind] + index

        self._plan: list[Operation] = [(f, position(a), position(b)) for f, a, b in self._operations]
        self._short_plan = self._plan[: self._short]
        self._value_positions = [position(a) for a in self._values]
        self._all_positions = [position(a) for a in self._all]

    def run(self, inputs: list[float], *, derivatives: bool) -> list[float]:
        """Values, and then the derivatives in the order of `species_entries` and `name_entries`.

        Parameters
        ----------
        inputs : list of float, species, then names, then T, then the widths of `roots`

        Raises
        ------
        ZeroDivisionError, OverflowError, ValueError
            Where an expression is not defined.
        """
        v = inputs + self._numbers
        append = v.append
        if derivatives:
            for f, a, b in self._plan:
                append(f(v[a], v[b]))
            return [v[i] for i in self._all_positions]
        for f, a, b in self._short_plan:
            append(f(v[a], v[b]))
        return [v[i] for i in self._value_positions]

    def widths(self, levels: list[float], tail: list[float], resolved: Sequence[float]) -> list[float]:
        """How far from zero each base in `roots` is unknown: that of a species, by the slope of the base to it.

        Parameters
        ----------
        levels : list of float, usual concentrations, at which the slopes are taken
        tail : list of float, names, then T
        resolved : width of each species
        """
        if self._bases is None:
            return []
        inner = self._bases.widths(levels, tail, resolved)
        try:
            found = self._bases.run(levels + tail + inner, derivatives=True)
        except (ArithmeticError, ValueError):
            return [SMALLEST_BASE] * len(self.roots)
        widths = [0.0] * len(self.roots)
        slopes = found[len(self.roots) :]
        for (base, species), slope in zip(self._bases.species_entries, slopes, strict=False):
            widths[base] += abs(slope) * resolved[species]
        return [w if SMALLEST_BASE < w < math.inf else SMALLEST_BASE for w in widths]


Address = tuple[str, int]


class _Writer:
    """Writes expressions and their slopes onto one list of operations, each distinct operation once."""

    def __init__(self, species: dict[str, int], names: dict[str, int]) -> None:
        self._species = species
        self._names = names
        self.numbers: list[float] = []
        self.roots: list[Expression] = []
        self.operations: list[tuple[Function, Address, Address]] = []
        self._forms: list[tuple[str, Address, Address]] = []
        self._known: dict[tuple[str, Address, Address], Address] = {}
        self._slopes: dict[tuple[Address, Address], Address | None] = {}

    def place(self, expression: Expression) -> Address:
        """Address of an expression's value; writes the operations it needs."""
        match expression:
            case Number(value):
                return self.number(value)
            case Parameter(name):
                return ("input", len(self._species) + self._names[name])
            case Concentration(species):
                return ("input", self._species[species])
            case Temperature():
                return ("input", len(self._species) + len(self._names))
            case Negation(operand):
                return self._one("minus", self.place(operand))
            case Binary("^", base, exponent):
                return self._power(base, exponent)
            case Binary(sign, left, right):
                return self._write(sign, self.place(left), self.place(right))
            case Call("sqrt", argument):
                return self._power(argument, Number(0.5))
            case Call(function, argument):
                return self._one(function, self.place(argument))
        raise TypeError(f"{expression!r} is not an expression")

    def _power(self, base: Expression, exponent: Expression) -> Address:
        """x^n; where it may be a root of a concentration, w^n (x/w)^n with the cubic below the width w."""
        x, n = self.place(base), self.place(exponent)
        fixed = isinstance(exponent, Number)
        if not species_of(base) or (isinstance(exponent, Number) and not 0.0 < exponent.value < 1.0):
            return self._write("^", x, n)
        if base not in self.roots:
            self.roots.append(base)
        width: Address = ("input", len(self._species) + len(self._names) + 1 + self.roots.index(base))
        w = width if fixed else self._write("reach", width, n)
        return self._write("*", self._write("^", w, n), self._write("root", self._write("/", x, w), n))

    def slope(self, of: Address, by: Address) -> Address | None:
        """Address of the derivative of a value by an input; None where it is zero whatever the inputs are."""
        if of == by:
            return self.number(1.0)
        if of[0] != "result":
            return None
        if (of, by) not in self._slopes:
            self._slopes[of, by] = self._slope_of_operation(of, by)
        return self._slopes[of, by]

    def _slope_of_operation(self, of: Address, by: Address) -> Address | None:
        key, a, b = self._forms[of[1]]
        da, db = self.slope(a, by), self.slope(b, by)
        match key:
            case "+":
                return self._sum(da, db)
            case "-":
                return self._difference(da, db)
            case "*":
                return self._sum(self._product(da, b), self._product(a, db))
            case "/":
                above = self._difference(da, self._product(of, db))
                return above and self._write("/ in derivative", above, b)
            case "minus":
                return da and self._one("minus", da)
            case "exp":
                return self._product(of, da)
            case "log":
                return da and self._write("/ in derivative", da, a)
            case "^" | "root":
                by_base = da and self._product(self._write(f"{key} by base", a, b), da)
                by_exponent = db and self._product(self._write(f"{key} by exponent", a, b), db)
                return self._sum(by_base, by_exponent)
        return None  # 'reach' moves with nothing

    def _sum(self, a: Address | None, b: Address | None) -> Address | None:
        return self._write("+", a, b) if a and b else a or b

    def _difference(self, a: Address | None, b: Address | None) -> Address | None:
        if b is None:
            return a
        return self._write("-", a, b) if a else self._one("minus", b)

    def _product(self, a: Address | None, b: Address | None) -> Address | None:
        if a is None or b is None:
            return None
        one = self.number(1.0)
        if one in (a, b):
            return b if a == one else a
        return self._write("*", a, b)

    def number(self, value: float) -> Address:
        if value not in self.numbers:
            self.numbers.append(value)
        return ("number", self.numbers.index(value))

    def _one(self, key: str, a: Address) -> Address:
        return self._write(key, a, a)

    def _write(self, key: str, a: Address, b: Address) -> Address:
        form = (key, a, b)
        if form not in self._known:
            self._known[form] = ("result", len(self.operations))
            self.operations.append((_FUNCTIONS[key], a, b))
            self._forms.append(form)
        return self._known[form]
