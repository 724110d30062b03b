"""The rate equations of a network as NumPy arrays: d[X]/dt, their Jacobian and their parameter derivatives.

Every mass-action rate is a monomial k * product([X]^n), and so is each of its derivatives. All monomials of
a network are gathered at once; rates, Jacobian and parameter derivatives are then one matrix product.
Written-out laws and their exact derivatives come from a tape and join the same product.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array

from kinetics_db.engine.network.model import Network, Side
from kinetics_db.engine.simulation.computed import ComputedConstants
from kinetics_db.engine.simulation.powers import SMALLEST_BASE, root, slope_of_root
from kinetics_db.engine.simulation.tape import Tape

Floats = NDArray[np.float64]
Ints = NDArray[np.intp]
DENSE_LIMIT = 60_000  # elements
Power = tuple[int, float, bool]
"""Species, order, and whether the power itself or its slope (without the factor `order`) is meant."""


class Equations:
    """A network compiled for integration. Immutable once made; `Bound` holds one run's numbers.

    Attributes
    ----------
    species, constants : as in the network
    net : ndarray, shape (s, r)
        Net stoichiometric numbers of the mass-action steps, then of the steps with a law; zero for held
        species. Rates are summed over steps last, so that rounding in the two large rates of a fast
        equilibrium cannot disturb what the step conserves.
    """

    def __init__(self, network: Network) -> None:
        self.network = network
        self.species = network.species
        self.constants = network.constants
        self.computed = ComputedConstants(network)
        self.held = np.array([name in network.held for name in network.species], dtype=bool)
        self._at = {name: i for i, name in enumerate(network.species)}
        self._compile_channels()
        self._compile_laws()

    def species_index(self, name: str) -> int:
        return self._at[name]

    @property
    def needs_temperature(self) -> bool:
        return self.law_tape.uses_temperature or self.computed.uses_temperature

    def _compile_channels(self) -> None:
        channels: list[tuple[str, dict[int, float], int, float]] = []  # constant, orders, step, direction
        nets: list[Floats] = []
        for step in self.network.steps:
            if step.constant is None:
                continue
            channels.append((step.constant, self._orders(step.reactants), len(nets), 1.0))
            if step.reverse_constant is not None:
                channels.append((step.reverse_constant, self._orders(step.products), len(nets), -1.0))
            nets.append(self._net(step.reactants, step.products))
        self._nets = nets
        self.channel_constants = tuple(c[0] for c in channels)
        self.channel_step = np.array([c[2] for c in channels], dtype=np.intp)
        self.channel_direction = np.array([c[3] for c in channels])
        rows = [self._factors(c[1]) for c in channels]
        entries: list[tuple[int, int, float]] = []  # channel, species, order in it
        for c, (_, orders, _, _) in enumerate(channels):
            for i, order in orders.items():
                entries.append((c, i, order))
                rows.append(self._factors({**orders, i: 0.0}) + self._slope_factors(i, order))
        self.entry_channel = np.array([e[0] for e in entries], dtype=np.intp)
        self.entry_species = np.array([e[1] for e in entries], dtype=np.intp)
        self.entry_order = np.array([e[2] for e in entries])
        self.factor_index, self.power_slots = self._gather(rows)

    def _compile_laws(self) -> None:
        laws = [(step, step.law) for step in self.network.steps if step.law is not None]
        nets = self._nets + [self._net(step.reactants, step.products) for step, _ in laws]
        self.net = np.array(nets).reshape(len(nets), len(self.species)).T.copy()
        names = self.computed.names
        self.law_tape = Tape([law for _, law in laws], species=self.species, names=names)

    def _net(self, reactants: Side, products: Side) -> Floats:
        net = np.zeros(len(self.species))
        for name, number in reactants:
            net[self._at[name]] -= number
        for name, number in products:
            net[self._at[name]] += number
        net[self.held] = 0.0
        return net

    def _orders(self, side: Side) -> dict[int, float]:
        orders: dict[int, float] = {}
        for name, number in side:
            orders[self._at[name]] = orders.get(self._at[name], 0.0) + number
        return orders

    def _factors(self, orders: Mapping[int, float]) -> list[int | Power]:
        factors: list[int | Power] = []
        for i, order in orders.items():
            if order == 0.0:
                continue
            if order > 0 and order == int(order) and order <= 4:
                factors.extend([i] * int(order))
            else:
                factors.append((i, order, False))
        return factors

    def _slope_factors(self, i: int, order: float) -> list[int | Power]:
        return self._factors({i: order - 1.0}) if order == int(order) else [(i, order, True)]

    def _gather(self, rows: Sequence[list[int | Power]]) -> tuple[Ints, list[Power]]:
        """Index array, shape (q, monomials), into [species..., 1, powers...]."""
        s = len(self.species)
        slots: list[Power] = []
        depth = max((len(row) for row in rows), default=1) or 1
        index = np.full((depth, len(rows)), s, dtype=np.intp)
        for column, row in enumerate(rows):
            for q, factor in enumerate(row):
                if isinstance(factor, tuple):
                    if factor not in slots:
                        slots.append(factor)
                    index[q, column] = s + 1 + slots.index(factor)
                else:
                    index[q, column] = factor
        return index, slots

    def bind(
        self,
        constants: Floats,
        *,
        temperature: float | None = None,
        wanted: Sequence[int] = (),
        scales: Floats | None = None,
    ) -> Bound:
        """Equations at given values of `network.constants`, with derivatives to the `wanted` ones.

        Parameters
        ----------
        constants : ndarray, shape (len(network.constants),)
        temperature : K
        wanted : positions in `network.constants`
        scales : ndarray, shape (len(wanted),), factor on each parameter derivative; 1 when None
        """
        return Bound(self, constants, temperature, wanted, scales)


@lru_cache(maxsize=64)
def equations_of(network: Network) -> Equations:
    """Compiled equations of a network, kept for the next call."""
    return Equations(network)


def _product(matrix: Floats) -> Callable[[Floats, Floats], object]:
    """matrix @ vector into an array; sparse where the matrix is large, as nearly all of it is then zero."""
    if matrix.size <= DENSE_LIMIT:
        dense = np.ascontiguousarray(matrix)
        return lambda vector, out: np.dot(dense, vector, out=out)
    sparse = csr_array(matrix)

    def apply(vector: Floats, out: Floats) -> None:
        out[:] = np.asarray(sparse @ vector)

    return apply


class Bound:
    """The equations of one run: evaluates f, J and df/dp at a state into arrays of its own.

    Not safe for use by two threads at once.
    """

    def __init__(
        self,
        equations: Equations,
        constants: Floats,
        temperature: float | None,
        wanted: Sequence[int],
        scales: Floats | None,
    ) -> None:
        self.equations = equations
        self.s = s = len(equations.species)
        self.p = p = len(wanted)
        values, gradient = equations.computed.evaluate(constants, temperature)
        self.values = values
        name_at = {name: i for i, name in enumerate(equations.computed.names)}
        channel = np.array([name_at[name] for name in equations.channel_constants], dtype=np.intp)
        k = values[channel]
        dvalues: Floats = gradient[:, list(wanted)]
        dk = dvalues[channel]
        if scales is not None:
            dk = dk * scales
            dvalues = dvalues * scales
        n_c, n_e = len(channel), len(equations.entry_channel)
        tape = equations.law_tape
        n_l = tape.outputs
        self._n_c, self._n_m = n_c, n_c + n_e
        n_y, n_k = len(tape.species_entries), len(tape.name_entries)
        total = n_c + n_e + n_l + n_y + n_k

        net = equations.net
        r, first_law = net.shape[1], net.shape[1] - n_l
        step, direction = equations.channel_step, equations.channel_direction
        at_l = n_c + n_e
        at_y, at_k = at_l + n_l, at_l + n_l + n_y
        rates = np.zeros((r, total))
        rates[step, np.arange(n_c)] = direction * k
        rates[first_law + np.arange(n_l), at_l + np.arange(n_l)] = 1.0
        slopes = np.zeros((s, r, total))  # [j, v] = d v / d y_j
        for e in range(n_e):
            c, j = equations.entry_channel[e], equations.entry_species[e]
            slopes[j, step[c], n_c + e] += direction[c] * k[c] * equations.entry_order[e]
        for e, (law, j) in enumerate(tape.species_entries):
            slopes[j, first_law + law, at_y + e] += 1.0
        parameters = np.zeros((p, r, total))
        for c in range(n_c):
            parameters[:, step[c], c] += direction[c] * dk[c]
        for e, (law, name) in enumerate(tape.name_entries):
            parameters[:, first_law + law, at_k + e] += dvalues[name]

        flat_slopes = slopes.reshape(s * r, total)
        self.r = r
        self._net_t = np.ascontiguousarray(net.T)
        self._to_rates = _product(np.hstack([rates[:, :n_c], rates[:, at_l:at_y]]))
        self._to_slopes = _product(flat_slopes)
        self._to_all = _product(np.concatenate([flat_slopes, parameters.reshape(p * r, total), rates]))
        self._step_rates = np.zeros(r)
        self._slopes = np.zeros(s * r)
        self._monomials = np.zeros(total)
        self._few = np.zeros(n_c + n_l)
        self._x = np.ones(s + 1 + len(equations.power_slots))
        self._index = equations.factor_index
        self._index_few = np.ascontiguousarray(equations.factor_index[:, :n_c])
        self._gathered = np.zeros(self._index.shape)
        self._pair = (self._gathered[0], self._gathered[1]) if len(self._gathered) == 2 else None
        self._products = self._monomials[: self._n_m]
        self._x_species = self._x[:s]
        self._gathered_few = np.zeros(self._index_few.shape)
        self._jac = np.zeros((s, s))
        self._out = np.zeros(s)
        self._powers = equations.power_slots
        self._widths = [SMALLEST_BASE] * s
        self._constants: list[float] = [*values.tolist(), math.nan if temperature is None else temperature]
        self._tail = self._constants + [SMALLEST_BASE] * len(tape.roots)
        self._tape = tape if n_l else None

    def soften_roots(self, widths: Floats, level: float) -> None:
        """Take orders between 0 and 1 as linear in species that are within their width of zero (see `powers`).

        Parameters
        ----------
        widths : ndarray, shape (s,), below what can be told from zero
        level : a usual concentration, which brings the widths to roots of other than a single species
        """
        self._widths = widths.tolist()
        tape = self.equations.law_tape
        self._tail = self._constants + tape.widths([level] * self.s, self._constants, self._widths)

    def _load_powers(self, y: Floats) -> None:
        for slot, (i, order, is_slope) in enumerate(self._powers, start=self.s + 1):
            f = slope_of_root if is_slope else root
            self._x[slot] = f(float(y[i]), order, self._widths[i])

    def rates(self, y: Floats) -> Floats:
        """d[X]/dt at y, shape (s,); the array is overwritten by the next call. Raises ArithmeticError or
        ValueError where a written-out law is not defined."""
        self._x_species[:] = y
        if self._powers:
            self._load_powers(y)
        g, few, n_c = self._gathered_few, self._few, self._n_c
        self._x.take(self._index_few, out=g, mode="clip")
        np.multiply.reduce(g, axis=0, out=few[:n_c])
        if self._tape is not None:
            few[n_c:] = self._tape.run(y.tolist() + self._tail, derivatives=False)
        self._to_rates(few, self._step_rates)
        np.dot(self._step_rates, self._net_t, self._out)
        return self._out

    def _fill_monomials(self, y: Floats) -> Floats:
        self._x_species[:] = y
        if self._powers:
            self._load_powers(y)
        self._x.take(self._index, out=self._gathered, mode="clip")
        if self._pair is not None:
            np.multiply(self._pair[0], self._pair[1], self._products)
        else:
            np.multiply.reduce(self._gathered, axis=0, out=self._products)
        if self._tape is not None:
            derivatives = self._tape.run(y.tolist() + self._tail, derivatives=True)
            self._monomials[self._n_m :] = derivatives
        return self._monomials

    def augmented(self, starts: int) -> Callable[[Floats], Floats]:
        """The right-hand side of y joined with its sensitivities, as a function of the joined state.

        The state holds y (s,), then a block of s for each wanted constant (scaled), then `starts` blocks for
        start concentrations. The array that the function gives is overwritten by its next call. It raises
        ArithmeticError or ValueError where a written-out law is not defined.
        """
        s, p, r = self.s, self.p, self.r
        blocks = p + starts
        # [dv/dy, dv/dp, v] and right behind it dv/dy S, so that the last two hold all rates by step
        memory = np.zeros(s * r + p * r + r + blocks * r)
        flat, by_step = memory[: s * r + p * r + r], memory[s * r + p * r :].reshape(1 + blocks, r)
        to_species, to_constants = memory[: s * r].reshape(s, r), memory[s * r : s * r + p * r].reshape(p, r)
        moved, moved_by_constants = by_step[1:], by_step[1 : 1 + p]
        answer = np.zeros(s * (1 + blocks))
        by_species = answer.reshape(1 + blocks, s)
        monomials, product, dot, add, net_t = self._fill_monomials, self._to_all, np.dot, np.add, self._net_t

        def evaluate(u: Floats) -> Floats:
            product(monomials(u[:s]), flat)
            dot(u[s:].reshape(blocks, s), to_species, moved)
            add(moved_by_constants, to_constants, moved_by_constants)
            dot(by_step, net_t, by_species)
            return answer

        return evaluate

    def jacobian_transposed(self, y: Floats) -> Floats:
        """[j, i] = d f_i / d y_j, shape (s, s); overwritten by the next call."""
        self._to_slopes(self._fill_monomials(y), self._slopes)
        np.dot(self._slopes.reshape(self.s, self.r), self._net_t, self._jac)
        return self._jac
