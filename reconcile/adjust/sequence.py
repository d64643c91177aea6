"""A sequence of windows that inventories tie together, adjusted as one system in time linear in its length.

Every window is a copy of the same equations. Its state s holds what outlives the window: the inventories, and what
stays the same throughout (shared errors, prior knowledge). With v the variables that the balances of a window leave
free, the balances give all others as ``x = X0 + Xs s + Xv v``, and ``inventory(t+1) - inventory(t) = dt rate`` gives the
state before a window from the one behind it, ``s- = T s+ + U v + w``. Readings and balances of the sequence are then one
block-bidiagonal least-squares problem. It is solved by orthogonal triangularisation window by window, with back
substitution for values and for the diagonal blocks of the inverse (Paige & Saunders 1977, SIAM J. Numer. Anal. 14, 180;
Bierman 1977, Factorization Methods for Discrete Sequential Estimation; citations from memory): on linear problems the
fixed-interval smoother without any prior for the first state. What the triangularisation leaves over is the parity
vector of the sequence: independent, of unit variance, its sum of squares the objective.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import SolveError
from ..system import Equations
from .blocks import Balances, Block, Triangle, back, close, forward, solve_balances
from .solve import Problem

__all__ = ["Chain", "Push", "Sequence", "solve_sequence"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

MAX_STEPS = 60


@dataclass(frozen=True)
class Chain:
    """What the windows of a sequence share, and how they are tied.

    Attributes
    ----------
    window : Problem
        One window: n columns, k readings; its own readings are ignored.
    inventories, rates : ndarray of int, shape (q,)
        Columns of the inventories, and of the rates at which they change.
    gains : ndarray, shape (N, q)
        Change of each inventory in each window per unit of its rate: the length of the window.
    constants : ndarray of int, shape (c,)
        Columns that hold one value throughout the sequence.
    at_end : bool
        Whether inventories are those at the end of each window; else those at its start.
    own : ndarray, shape (N, k), optional
        Sigmas of single cells that replace the law of the window; nan where that holds.
    scatter : ndarray, shape (N, k), optional
        What adds to that law in quadrature.
    """

    window: Problem
    inventories: Ints
    rates: Ints
    gains: Array
    constants: Ints
    at_end: bool
    own: Array | None = None
    scatter: Array | None = None

    def sigma(self, values: Array) -> Array:
        """Sigma of every reading, shape (N, k), at these values of the readings."""
        law = np.array([self.window.sigma(v) for v in values])
        if self.scatter is not None:
            law = np.hypot(law, self.scatter)
        return law if self.own is None else np.where(np.isfinite(self.own), self.own, law)


@dataclass(frozen=True)
class Push:
    """A possible fault, as what it would do to the sequence per unit of its size.

    Attributes
    ----------
    reading : int
        Index of a reading that it moves, or -1.
    column : int
        Column of a fault variable, or -1.
    first, stop : int
        Windows in which it is there.
    """

    reading: int
    column: int
    first: int
    stop: int


@dataclass(frozen=True)
class Sequence:
    """An adjusted sequence of N windows.

    Attributes
    ----------
    x : ndarray, shape (N, n)
        All columns; undetermined ones at an arbitrary value that satisfies the balances.
    determined : ndarray of bool, shape (N, n)
    covers : tuple of ndarray, each (n, w)
        Factor F of the covariance of the columns of each window: cov = F F'.
    carries : tuple of ndarray, each (s, s)
        ``cov(state before window t, anything later) = carries[t] cov(state behind window t, the same)``.
    outer : ndarray, shape (q,)
        Inventories at the other end of the sequence: behind the last window, or with `at_end` before the first.
    outer_cover : ndarray, shape (q, w)
    outer_determined : ndarray of bool, shape (q,)
    parity : ndarray, shape (r,)
    window_of : ndarray of int, shape (r,)
        Window whose readings completed each check.
    signatures : ndarray, shape (r, p)
        Of the pushes, per unit of each.
    sigma : ndarray, shape (N, k)
        Of every reading, as used.
    steps : int
        Linearisations that were needed.
    """

    x: Array
    determined: Bools
    covers: tuple[Array, ...]
    carries: tuple[Array, ...]
    outer: Array
    outer_cover: Array
    outer_determined: Bools
    parity: Array
    window_of: Ints
    signatures: Array
    sigma: Array
    steps: int


def solve_sequence(
    chain: Chain,
    readings: Array,
    *,
    start: Array | None = None,
    pushes: tuple[Push, ...] = (),
    names: Callable[[int], str],
    row_names: Callable[[int], str],
) -> Sequence:
    """Adjust a sequence of windows.

    Parameters
    ----------
    chain : Chain
    readings : ndarray, shape (N, k)
        nan where a reading is absent. What is read once, such as prior knowledge, stands in the first row only.
    start : ndarray, shape (N, n), optional
        Where balances with products are linearised first; needed for those.
    pushes : tuple of Push
        Possible faults whose signatures are wanted.
    names, row_names : callable
        Give the name of a column and of a row, for messages.

    Returns
    -------
    Sequence

    Raises
    ------
    SolveError
        If a balance ties inventories without any flow, or no consistent answer was reached.
    """
    work = _Work(chain, readings, pushes, names, row_names)
    values = np.where(np.isfinite(readings), readings, 0.0)
    fixed, problem = chain.window.fixed, chain.window
    equations = problem.equations(values[0])
    if equations.is_linear and not problem.value_dependent:
        return work.solve(None, values, 1)
    x = np.zeros((len(readings), problem.start.size)) if start is None else np.nan_to_num(start)
    x[:, fixed] = problem.start[fixed]
    previous = np.inf
    for count in range(1, MAX_STEPS + 1):
        now = work.solve(x, values, count)
        move, closure = work.distance(now, x, values)
        linear = equations.is_linear
        if count > 1 and move < 1e-7 and closure < 1e-11:
            return now
        length = 1.0 if linear or move < previous or move < 1.0 else 0.5
        previous = move
        x = np.asarray(x + length * (now.x - x))
        if problem.settle:
            values = np.where(np.isfinite(now.x[:, problem.columns]), x[:, problem.columns], values)
    window, row, off = work.worst(x, values)
    raise SolveError(
        f"no consistent answer for the sequence in {MAX_STEPS} steps: values still move by {move:.1e} sigma, and in window "
        f"{window + 1} balance {row_names(row)!r} closes to {off:.1e} of its largest term; nothing is exported",
        code="no-convergence",
        hint="run the windows one by one without trajectory: first; a window that fails alone shows where to look",
    )


class _Work:
    """One linearised pass over the sequence, and how far it has come."""

    def __init__(
        self,
        chain: Chain,
        readings: Array,
        pushes: tuple[Push, ...],
        names: Callable[[int], str],
        row_names: Callable[[int], str],
    ) -> None:
        self.chain, self.readings, self.pushes = chain, readings, pushes
        self.names, self.row_names = names, row_names
        self.state = np.concatenate([chain.inventories, chain.constants]).astype(np.int64)
        taken = np.zeros(chain.window.start.size, dtype=bool)
        taken[self.state] = True
        taken[chain.window.fixed] = True
        self.rest = np.flatnonzero(~taken)
        self._equations: Equations | None = None
        self._balances: Balances | None = None

    def equations(self, values: Array) -> Equations:
        """Rows of a window; made once where they do not depend on the values."""
        if self.chain.window.value_dependent or self._equations is None:
            made = self.chain.window.equations(values)
            if made is not self._equations:
                self._equations, self._balances = made, None
        assert self._equations is not None
        return self._equations

    def solve(self, x: Array | None, values: Array, steps: int) -> Sequence:
        """Linearise every window at x, and solve the whole."""
        problem = self.chain.window
        sigma = self.chain.sigma(values)
        present = np.isfinite(self.readings)
        bad = np.argwhere(present & (~(sigma > 0) | ~np.isfinite(sigma)))
        if bad.size:
            t, i = bad[0]
            raise SolveError(
                f"the sigma of {self.names(int(problem.columns[i]))} vanishes in window {t + 1}, since it is stated in "
                "percent of a value near zero",
                code="sigma-vanishes",
                hint="add an absolute part, e.g. sigma: [1 % of reading, 0.1 kg/h]",
            )
        triangle = Triangle.empty(self.state.size, 1 + len(self.pushes))
        blocks, leftovers, window_of = [], [], []
        pushed = np.zeros(len(self.pushes))
        for t in range(len(self.readings)):
            block = self._block(t, None if x is None else x[t], values[t], sigma[t])
            pushed += (block.target[:, 1:] ** 2).sum(axis=0) + (block.shift[:, 1:] ** 2).sum(axis=0)
            step, triangle, left = forward(block, triangle)
            blocks.append((block, step))
            leftovers.append(left)
            window_of.append(np.full(len(left), t, dtype=np.int64))
        parity = np.vstack(leftovers)
        # A signature that is only rounding is none: judged against what was pushed.
        parity[:, 1:][:, (parity[:, 1:] ** 2).sum(axis=0) <= 1e-20 * pushed] = 0.0
        end = close(triangle)
        size, n = len(self.readings), problem.start.size
        out, determined = np.empty((size, n)), np.empty((size, n), dtype=bool)
        covers: list[Array] = []
        carries: list[Array] = []
        last, q = end, self.chain.inventories.size
        for t in range(size - 1, -1, -1):
            block, step = blocks[t]
            end, out[t], determined[t], cover, carry = back(block, step, end)
            covers.append(cover)
            carries.append(carry)
        outer = end if self.chain.at_end else last
        return Sequence(
            x=out,
            determined=determined,
            covers=tuple(covers[::-1]),
            carries=tuple(carries[::-1]),
            outer=outer.value[:q],
            outer_cover=outer.cover[:q],
            outer_determined=outer.determined[:q],
            parity=parity[:, 0],
            window_of=np.concatenate(window_of),
            signatures=parity[:, 1:],
            sigma=sigma,
            steps=steps,
        )

    def _block(self, t: int, x: Array | None, values: Array, sigma: Array) -> Block:
        """Write window t as functions of the state behind it and its free variables, with its weighted readings."""
        chain, problem, rest, state = self.chain, self.chain.window, self.rest, self.state
        balances = self._solved(x, values, sigma)
        c, p = state.size, 1 + len(self.pushes)
        constant, n = np.zeros((problem.start.size, p)), problem.start.size
        constant[problem.fixed, 0] = problem.start[problem.fixed]
        constant[rest, 0] = balances.constant
        of_state, of_free = np.zeros((n, c)), np.zeros((n, balances.of_free.shape[1]))
        of_state[state, np.arange(c)] = 1.0
        of_state[rest], of_free[rest] = balances.of_state, balances.of_free
        active = [j for j, push in enumerate(self.pushes) if push.first <= t < push.stop]
        for j in active:
            if self.pushes[j].column >= 0:
                # The fault moves what is read; to balances that do not know of it, that is a move the other way.
                constant[rest, 1 + j] = -balances.of_fault(self.pushes[j].column)
        # The state before the window from the state it is written in, and the other way round.
        q = chain.inventories.size
        change = np.zeros((c, n))
        change[np.arange(q), chain.rates] = chain.gains[t]
        if chain.at_end:
            step, w, u = np.eye(c) - change @ of_state, -change @ constant, -change @ of_free
        else:
            step = np.asarray(np.linalg.inv(np.eye(c) + change @ of_state), dtype=np.float64)
            w, u = -step @ (change @ constant), -step @ (change @ of_free)
            constant += of_state @ w
            of_free = of_free + of_state @ u
            of_state = of_state @ step
        present = np.flatnonzero(np.isfinite(self.readings[t]))
        columns = problem.columns[present]
        weight = 1.0 / sigma[present, None]
        target = -constant[columns]
        target[:, 0] += self.readings[t, present]
        for j in active:
            if self.pushes[j].reading >= 0:
                target[present == self.pushes[j].reading, 1 + j] += 1.0
        return Block(
            constant[:, 0], of_state, of_free, step, u, w, of_state[columns] * weight, of_free[columns] * weight,
            target * weight,
        )  # fmt: skip

    def _solved(self, x: Array | None, values: Array, sigma: Array) -> Balances:
        """Balances of a window solved for its dependent variables; made once where all windows share them."""
        problem = self.chain.window
        equations = self.equations(values)
        if self._balances is not None:
            return self._balances
        at = np.zeros(problem.start.size) if x is None else x
        closure = equations.closure(at)
        jacobian = equations.jacobian(at).toarray()
        if not np.all(np.isfinite(closure)) or not np.all(np.isfinite(jacobian)):
            bad = np.flatnonzero(~np.isfinite(closure) | ~np.isfinite(jacobian).all(axis=1))
            raise SolveError(
                f"balance {self.row_names(int(bad[0]))!r} is not a finite number at the current values",
                code="not-finite",
                hint="check units and expected values",
            )
        fixed = problem.fixed
        known = jacobian @ at - closure - jacobian[:, fixed] @ problem.start[fixed]
        spread = np.full(problem.start.size, np.nan)
        spread[problem.columns] = np.where(sigma > 0, sigma, np.nan)
        found = solve_balances(jacobian, known, self.rest, self.state, spread)
        if found.tied.size:
            raise SolveError(
                f"balance {self.row_names(int(found.tied[0]))!r} ties inventories or constants of the sequence to each other "
                "without any flow of the window",
                code="inventory-tied",
                hint="state the value with a sigma under known:, or leave the balance out",
            )
        if equations.is_linear:
            self._balances = found
        return found

    # ------------------------------------------------------------------ how far it has come

    def distance(self, now: Sequence, x: Array, values: Array) -> tuple[float, float]:
        """Largest move in sigmas (or of its own size, where a variable is not read), and largest relative closure."""
        problem = self.chain.window
        move = np.abs(now.x - x)
        scale = 0.1 * np.maximum(np.abs(now.x), 1e-9)
        read = scale[:, problem.columns]
        scale[:, problem.columns] = np.where(np.isfinite(self.readings), now.sigma, read)
        largest = float(np.max(np.where(now.determined, move / scale, 0.0), initial=0.0))
        return largest, self.worst(now.x, values)[2]

    def worst(self, x: Array, values: Array) -> tuple[int, int, float]:
        """Window and row that close worst, relative to the largest term of the row, and how far."""
        most = (0, 0, 0.0)
        for t, point in enumerate(x):
            equations = self.equations(values[t])
            off = np.abs(equations.closure(point)) / np.maximum(equations.largest_term(point), 1e-300)
            if off.size and off.max() > most[2]:
                most = (t, int(np.argmax(off)), float(off.max()))
        return most
