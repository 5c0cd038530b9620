"""The analogue loop: a delay differential equation, solved piece by piece.

The loop is linear, so that over a piece of time in which nothing jumps

    z' = M z + sum_k N_k v_k + F f,    u = K z + sum_k m_k v_k + m_f f

with z the states of process and controller, v_k = u(t - L_k) the output as each dead time lets it
through, and f what comes from outside (setpoint, upset), constant over the piece.  On a piece u is
a polynomial through equally spaced nodes.  v_k is then known from earlier pieces, except where the
piece is longer than the dead time; that part is solved for at once.  The states follow exactly
(matrix exponential), so a loop without dead time is exact whatever the step.

Pieces begin where something jumps (an event, and its echoes through the dead times until they have
become smooth), start as short as the fastest part of the loop wants, and grow as it calms down.

Source
------
Exponential integrators with polynomial inputs: common practice; the arrangement for dead times is
our own, checked in the tests against the power series in exp(-L s).
"""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import InputError, Problem, problem
from workbench.model.feedback import Loop
from workbench.model.matrix import expm
from workbench.sim.process import Entry, Process
from workbench.sim.scans import BOUND
from workbench.sim.signals import Step

Array = NDArray[np.float64]

_DEGREE: Final = 7
"""Degree of the polynomials."""
_TOLERANCE: Final = 1e-7
"""Largest difference of order `_DEGREE` along a piece, as a share of the signal."""
MOST_PIECES: Final = 20_000
"""Beyond, the end asked for is too far away."""
_MOST_ECHOES: Final = 400
"""Of one event; more are left where PV jumps with the output and a loop gain near 1."""
_NODES: Final = np.linspace(0.0, 1.0, _DEGREE + 1)
_TO_POWERS: Final = np.linalg.inv(np.vander(_NODES, increasing=True))
"""Values at the nodes -> coefficients in rising powers of the share of the piece."""
_RISING: Final = np.arange(1.0, _DEGREE + 1)
_DIFFERENCE: Final = np.array([(-1.0) ** k * math.comb(_DEGREE, k) for k in range(_DEGREE + 1)])


@dataclass(frozen=True)
class Equations:
    """The closed loop between jumps; columns of f are the setpoint, then each load entry."""

    m: Array
    """(n, n)"""
    n: Array
    """(n, delays)"""
    f: Array
    """(n, 1 + load entries)"""
    output: tuple[Array, Array, Array]
    """Rows of u over z, v and f."""
    pv: tuple[Array, Array, Array]
    """Rows of y over z, v and f."""
    delays: tuple[float, ...]
    """[s], all above 0."""


def equations(loop: Loop, process: Process, negligible: float = 0.0) -> Equations:
    """The closed loop as one set of equations; dead times up to `negligible` [s] count as none.

    Raises `InputError` where an unfiltered derivative would make an impulse, or where output and PV
    answer each other at the same instant with no solution.
    """
    late = [entry for entry in process.output if entry.dead_time > negligible]
    prompt = [entry for entry in process.output if entry.dead_time <= negligible]
    n = len(process.c)
    # Every signal is a row over [x, filtered PV, integral, derivative | v | f | u].
    size = n + 3
    setpoint = size + len(late)
    v, f = slice(size, setpoint), slice(setpoint, setpoint + 1 + len(process.load))
    rates, y = _process_rows(process, [*late, None, *process.load], prompt, size)
    u, held_rates = _controller_rows(loop, process, rates, y, setpoint)
    remaining = 1.0 - u[-1]
    if abs(remaining) < 1e-9:
        raise problem(
            "output and PV answer each other at the same instant without end",
            "give the plant a lag or a dead time, or the controller a scan",
            key="controller.gain",
        )
    u = u[:-1] / remaining
    whole = np.vstack([rates, held_rates])
    whole = whole[:, :-1] + np.outer(whole[:, -1], u)
    y = y[:-1] + y[-1] * u
    used = _used(whole[:, :size], [u[:size], y[:size]], n)
    return Equations(
        whole[np.ix_(used, used)],
        whole[used, v],
        whole[used, f],
        (u[used], u[v], u[f]),
        (y[used], y[v], y[f]),
        tuple(entry.dead_time for entry in late),
    )


def _process_rows(
    process: Process, entries: list[Entry | None], prompt: list[Entry], size: int
) -> tuple[Array, Array]:
    """Rows of x' and of PV.

    `entries` are the columns behind the states (None: the setpoint, which does not act on the
    process); the last column is u, which the `prompt` entries let through at once.
    """
    n, columns = len(process.c), size + len(entries) + 1
    rates, y = np.zeros((n, columns)), np.zeros(columns)
    rates[:, :n], y[:n] = process.a, process.c
    placed = [(size + k, entry) for k, entry in enumerate(entries)]
    for column, entry in [*placed, *((columns - 1, entry) for entry in prompt)]:
        if entry is not None:
            rates[:, column] += entry.b
            y[column] += entry.d
    return rates, y


def _controller_rows(
    loop: Loop, process: Process, rates: Array, y: Array, setpoint_column: int
) -> tuple[Array, Array]:
    """Row of u, and rows of the rates of filtered PV, integral and derivative (3, columns)."""
    gains, n = loop.gains, len(process.c)
    unit = np.eye(len(y))
    filtered, integral, derivative, setpoint = unit[[n, n + 1, n + 2, setpoint_column]]
    nothing = np.zeros_like(y)
    if loop.pv_filter:
        seen, seen_rate = filtered, (y - filtered) / loop.pv_filter
    else:
        seen, seen_rate = y, process.c @ rates
    part, derivative_rate = nothing, nothing
    if gains.derivative and gains.filter_time:
        error = gains.derivative_weight * setpoint - seen
        derivative_rate = (error - derivative) / gains.filter_time
        part = gains.derivative * derivative_rate
    elif gains.derivative:
        _refuse_impulse(loop, process)
        part = -gains.derivative * seen_rate
    proportional = gains.proportional * (gains.setpoint_weight * setpoint - seen)
    u = loop.sign * (proportional + integral + part)
    filtered_rate = seen_rate if loop.pv_filter else nothing
    return u, np.vstack([filtered_rate, gains.integral * (setpoint - seen), derivative_rate])


def _used(matrix: Array, rows: list[Array], n: int) -> list[int]:
    """The process states, and those controller states that something depends on."""
    return [
        i
        for i in range(len(matrix))
        if i < n or any(row[i] for row in rows) or np.delete(matrix[:, i], i).any()
    ]


def _refuse_impulse(loop: Loop, process: Process) -> None:
    if loop.gains.derivative_weight:
        raise problem(
            "an unfiltered derivative of the error makes an impulse of a setpoint step",
            "give a derivative filter, or put the derivative on PV",
            key="controller.derivative_filter",
        )
    jumps = any(entry.d for entry in (*process.output, *process.load))
    if jumps and not loop.pv_filter:
        raise problem(
            "an unfiltered derivative makes an impulse where PV jumps",
            "give a derivative filter or a PV filter",
            key="controller.derivative_filter",
        )


class TooManyPieces(InputError):
    """The loop moves too fast to be followed to the end asked for."""


_TOO_LONG: Final = Problem(
    "the loop moves too fast to be followed for so long",
    "give an earlier end",
    key="scenario.until",
)


# --- where things jump ---------------------------------------------------------------------------


def _smoothness(row_direct: float, row: Array, m: Array, column: Array) -> int:
    """How many times a jump of the input is integrated before it shows in the row's signal."""
    if row_direct:
        return 0
    state = column
    size = float(np.abs(row).max(initial=0.0))
    for order in range(1, _DEGREE + 1):
        reached = float(np.abs(state).max(initial=0.0))
        if abs(float(row @ state)) > 1e-12 * size * reached:
            return order
        state = m @ state
    return _DEGREE + 1


def _jumps(eq: Equations, events: list[tuple[float, int]], until: float) -> list[float]:
    """Instants at which pieces must begin, rising; `events` are (time, column of f)."""
    found: list[float] = []
    for time in sorted(time for event in events for time in _echoes(eq, event, until)):
        if not found or time - found[-1] > 1e-9 * until:
            found.append(time)
    return found


def _echoes(eq: Equations, event: tuple[float, int], until: float) -> set[float]:
    """The instants at which one event is felt, the event itself and the sharpest echoes first."""
    k, m, mf = eq.output
    around = [_smoothness(m[j], k, eq.m, eq.n[:, j]) for j in range(len(eq.delays))]
    time, column = event
    # (order, -size, time): a jump that is not integrated is followed until its size has gone.
    queue = [(_smoothness(mf[column], k, eq.m, eq.f[:, column]), -1.0, time)]
    found: set[float] = set()
    seen = set(queue)
    while queue and len(found) < _MOST_ECHOES:
        order, size, time = heapq.heappop(queue)
        found.add(time)
        for j, delay in enumerate(eq.delays):
            later = size if around[j] else max(size * abs(m[j]), -1e9)
            echo = (order + around[j], later, time + delay)
            if echo[0] <= _DEGREE and later < -1e-8 and echo[2] < until and echo not in seen:
                seen.add(echo)
                heapq.heappush(queue, echo)
    return found


def powers(nodes: Array) -> Array:
    """Values at the nodes of a piece as coefficients in rising powers of the share of it."""
    return np.asarray(_TO_POWERS @ nodes, np.float64)


# --- the piece -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Rule:
    """One matrix takes (z, v at the nodes, f) at a piece's start to all that is wanted of it."""

    length: float
    matrix: Array
    """Rows: u at the nodes, y at the nodes, z at the end."""
    inside: list[int]
    """For each dead time, the first node whose delayed instant lies inside the piece itself."""


def _rule(eq: Equations, length: float) -> _Rule:
    nodes, known = _DEGREE + 1, len(eq.m) + len(eq.delays) * (_DEGREE + 1)
    # Columns are z, v at the nodes, f; each row of `values` follows one state or coefficient.
    one = expm(_generator(eq, length) / _DEGREE)
    values = np.eye(len(one))
    for k in range(len(eq.delays)):
        at = _columns_of(eq, k)
        values[at, at] = _TO_POWERS
    signals: tuple[list[Array], list[Array]] = ([], [])
    for i in range(nodes):
        for rows, (of_z, of_v, of_f) in zip(signals, (eq.output, eq.pv), strict=True):
            row = of_z @ values[: len(eq.m)]
            row[known:] += of_f
            row[len(eq.m) + i : known : nodes] += of_v
            rows.append(row)
        if i < _DEGREE:
            values = one @ values
    whole = np.vstack([*signals[0], *signals[1], values[: len(eq.m)]])
    inside, own = _own_part(eq, length)
    if own.any():
        at = slice(len(eq.m), known)
        u = whole[:nodes]
        # u = U (z, v_known + own u, f)  solved for u
        solved = np.linalg.solve(np.eye(nodes) - u[:, at] @ own, u)
        whole = whole + whole[:, at] @ own @ solved
    return _Rule(length, whole, inside)


def _columns_of(eq: Equations, k: int) -> slice:
    """Where v of dead time k stands among z, v and f."""
    start = len(eq.m) + k * (_DEGREE + 1)
    return slice(start, start + _DEGREE + 1)


def _generator(eq: Equations, length: float) -> Array:
    """Rates of (z, Taylor coefficients of each v, f) over a piece of length 1.

    The coefficients are about the moving instant, so that a_j' = (j + 1) a_(j+1).
    """
    n, known = len(eq.m), len(eq.m) + len(eq.delays) * (_DEGREE + 1)
    generator = np.zeros((known + eq.f.shape[1],) * 2)
    generator[:n, :n] = length * eq.m
    generator[:n, known:] = length * eq.f
    for k in range(len(eq.delays)):
        at = _columns_of(eq, k)
        generator[:n, at.start] = length * eq.n[:, k]
        generator[at, at] = np.diag(_RISING, 1)
    return generator


def _own_part(eq: Equations, length: float) -> tuple[list[int], Array]:
    """How v at the nodes depends on u of the same piece, for dead times shorter than the piece."""
    nodes = _DEGREE + 1
    own = np.zeros((len(eq.delays) * nodes, nodes))
    first = []
    for k, delay in enumerate(eq.delays):
        shifted = _NODES - delay / length
        inside = shifted > 1e-9
        first.append(int(np.argmax(inside)) if inside.any() else nodes)
        for i in np.flatnonzero(inside):
            own[k * nodes + i] = shifted[i] ** np.arange(nodes) @ _TO_POWERS
    return first, own


@dataclass(frozen=True)
class Piece:
    """What the loop does from `start` for `length` [s]."""

    start: float
    length: float
    output: list[float]
    """Coefficients of u in rising powers of the share of the piece."""
    pv: Array
    """PV at the nodes."""
    nodes: Array
    """u at the nodes."""

    def rows(self, count: int) -> tuple[Array, Array, Array]:
        """Instants [s], PV and u at `count` + 1 equally spaced places and where either turns."""
        shares = np.linspace(0.0, 1.0, count + 1)
        both = np.column_stack([_TO_POWERS @ self.pv, self.output])
        slopes = np.vander(shares, _DEGREE, increasing=True) @ (both[1:] * _RISING[:, np.newaxis])
        row, column = np.nonzero(slopes[:-1] * slopes[1:] < 0.0)
        if len(row):
            before, after = slopes[row, column], slopes[row + 1, column]
            part = before / (before - after)
            # A turn that is all but on a row is rounding.
            turns = (shares[row] + part / count)[(part > 1e-3) & (part < 0.999)]
            shares = np.unique(np.concatenate([shares, turns]))
        pv, output = (np.vander(shares, _DEGREE + 1, increasing=True) @ both).T
        return self.start + self.length * shares, pv, output


class _History:
    """Earlier pieces, read at delayed instants in rising order."""

    def __init__(self, delays: tuple[float, ...]) -> None:
        self.pieces: list[Piece] = []
        self._at = [0] * len(delays)

    def read(self, k: int, times: list[float], edge: float) -> list[float]:
        """Output at rising instants of one piece, the first from after it, the last from before.

        `edge` is how far inside [s] the ends are looked at, so that a jump there is on its side.
        """
        pieces, values = self.pieces, []
        at, last, final = self._at[k], len(self.pieces) - 1, len(times) - 1
        for i, time in enumerate(times):
            seen = time + edge if i == 0 else time - edge if i == final else time
            if last < 0 or seen < pieces[0].start:
                values.append(0.0)
                continue
            while at < last and pieces[at + 1].start <= seen:
                at += 1
            while at > 0 and pieces[at].start > seen:
                at -= 1
            piece = pieces[at]
            share = (time - piece.start) / piece.length
            value = 0.0
            for c in reversed(piece.output):
                value = value * share + c
            values.append(value)
        self._at[k] = at
        return values


def _base(eq: Equations, until: float) -> tuple[float, float]:
    """The ladder of piece lengths (powers of two of the first) and the shortest time constant."""
    rates = np.abs(np.linalg.eigvals(eq.m)) if len(eq.m) else np.zeros(0)
    fastest = float(rates.max(initial=0.0))
    base = eq.delays[0] if eq.delays and eq.delays[0] < until else until
    return base, (1.0 / fastest if fastest > 1.0 / until else until)


def solve(
    loop: Loop,
    process: Process,
    setpoint: Step,
    load: Step,
    until: float,
    most_pieces: int = MOST_PIECES,
) -> tuple[list[Piece], bool]:
    """The course of the analogue loop from rest to `until` [s], and whether it was cut off.

    Raises `TooManyPieces`, and `InputError` as `equations` does.
    """
    eq = equations(loop, process, 1e-9 * until)
    events = [(setpoint.time, 0)] if setpoint.size else []
    arrivals = [load.time + entry.dead_time for entry in process.load] if load.size else []
    events += [(time, 1 + j) for j, time in enumerate(arrivals)]
    marks = _jumps(eq, [event for event in events if event[0] < until], until)
    if not marks:
        return [], False
    base, fastest = _base(eq, until)
    history = _History(eq.delays)
    march = _March(eq, history, base, fastest, most_pieces)
    for start, end in zip(marks, [*marks[1:], until], strict=True):
        f = np.zeros(eq.f.shape[1])
        if setpoint.time <= start + 1e-9 * until:
            f[0] = setpoint.size
        for j, time in enumerate(arrivals):
            if time <= start + 1e-9 * until:
                f[1 + j] = load.size
        if march.to(start, end, f):
            return history.pieces, True
    return history.pieces, False


class _March:
    """Goes forward piece by piece, choosing their lengths."""

    def __init__(
        self, eq: Equations, history: _History, base: float, fastest: float, most_pieces: int
    ) -> None:
        self.eq, self.history, self.most_pieces = eq, history, most_pieces
        self.base, self.fastest = base, fastest
        self.state = np.zeros(len(eq.m))
        self.rules: dict[float, _Rule] = {}
        self.largest_u = self.largest_y = 1e-300
        self.reads_u, self.reads_y = (
            float(np.abs(row[0]).max(initial=0.0)) for row in (eq.output, eq.pv)
        )

    def _rule(self, length: float) -> _Rule:
        key = float(f"{length:.11e}")
        if key not in self.rules:
            self.rules[key] = _rule(self.eq, length)
        return self.rules[key]

    def to(self, start: float, end: float, f: Array) -> bool:
        """From one jump to the next; True where the loop has left the bound."""
        ladder = math.floor(math.log2(min(0.5 * self.fastest, end - start) / self.base))
        at = start
        nodes = _DEGREE + 1
        while at < end:
            length = self.base * 2.0**ladder
            # No crumbs: a last piece of up to one and a half lengths is tried whole.
            clipped = end - at < 1.5 * length
            rule = self._rule(end - at if clipped else length)
            result, error = self._try(rule, at, f)
            if error > 1.0 and rule.length > 0.01 * self.fastest:
                # A clipped piece may be longer than its step of the ladder: always go down one.
                shorter = math.floor(math.log2(rule.length / self.base) - 0.51)
                ladder = min(ladder - 1, shorter)
                continue
            u, y = result[:nodes], result[nodes : 2 * nodes]
            if not bool((np.abs(y) <= BOUND).all()):
                return True
            self.history.pieces.append(Piece(at, rule.length, (_TO_POWERS @ u).tolist(), y, u))
            if len(self.history.pieces) > self.most_pieces:
                raise TooManyPieces(_TOO_LONG)
            self.state = result[2 * nodes :]
            self.largest_u = max(self.largest_u, float(np.abs(u).max()))
            self.largest_y = max(self.largest_y, float(np.abs(y).max()))
            at = end if clipped else at + length
            if error < 0.5**_DEGREE:
                ladder += 1 if error > 0.25**_DEGREE else 2
        return False

    def _try(self, rule: _Rule, at: float, f: Array) -> tuple[Array, float]:
        nodes = _DEGREE + 1
        v: list[float] = []
        times = (at + rule.length * _NODES).tolist()
        for k, delay in enumerate(self.eq.delays):
            first = rule.inside[k]
            # Instants inside the piece itself are in the rule; the edge belongs to the past.
            past = [time - delay for time in times[:first]]
            v += self.history.read(k, past, 1e-7 * rule.length)
            v += [0.0] * (nodes - first)
        result = rule.matrix @ np.concatenate([self.state, v, f])
        u, y = result[:nodes], result[nodes : 2 * nodes]
        # A signal that is small beside the states it is read from carries their rounding.
        state = 1e-5 * float(np.abs(result[2 * nodes :]).max(initial=0.0))
        scale_u = max(self.largest_u, float(np.abs(u).max()), state * self.reads_u)
        scale_y = max(self.largest_y, float(np.abs(y).max()), state * self.reads_y)
        error = max(abs(_DIFFERENCE @ u) / scale_u, abs(_DIFFERENCE @ y) / scale_y)
        return result, float(error) / _TOLERANCE
