"""Circuits of R, C and L solved exactly: taken apart once into modes that decay on their own.

With x the voltages of the capacitors (and the currents of the coils), a circuit whose switches
stand still obeys dx/dt = −A·x + D·j(t), where j is the current fed into each capacitor from
outside. Without coils A is similar to BᵀB, where row e of B is √g_e times the voltage of resistor
e per √joule in each capacitor. B's singular values span half the decades that A's eigenvalues
span, so that a contact of 0.1 Ω beside 100 pF does not blur a leakage that takes a day.
"""

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Modal = NDArray[np.float64] | NDArray[np.complex128]

_SLOWEST_HZ = 1e-30  # in place of a mode that does not decay at all


@dataclass(frozen=True, slots=True)
class Resistor:
    """A resistance (ohm) between two nodes."""

    a: str
    b: str
    ohm: float


@dataclass(frozen=True, slots=True)
class Store:
    """A capacitance (F) between two nodes; its voltage, a above b, is a state."""

    name: str
    a: str
    b: str
    farad: float


@dataclass(frozen=True, slots=True)
class Coil:
    """An inductance (H) between two nodes; its current, from a to b, is a state."""

    name: str
    a: str
    b: str
    henry: float


class Modes:
    """One connected circuit in its modes: y = into·x, dy/dt = −rates·y + drive·j.

    ``resistors``, ``stores`` and ``coils`` join all nodes; stores form no loop. Node
    voltages are counted from ``ground`` if it is one of the nodes.
    """

    def __init__(
        self,
        resistors: Sequence[Resistor],
        stores: Sequence[Store],
        coils: Sequence[Coil] = (),
        ground: str = "0",
    ) -> None:
        self.names = (*(one.name for one in stores), *(one.name for one in coils))
        self.index = {name: place for place, name in enumerate(self.names)}
        tree = _tree(
            tuple((one.a, one.b) for one in resistors),
            tuple((one.a, one.b) for one in stores),
            tuple((one.a, one.b) for one in coils),
            ground,
        )
        farads = np.array([one.farad for one in stores])
        henries = np.array([one.henry for one in coils])
        # rows by falling conductance: Householder reflections then keep small rows accurate
        ohms = np.array([one.ohm for one in resistors])
        order = np.argsort(ohms, kind="stable")
        weight = ohms[order, None] ** -0.5
        by_store, by_root = weight * tree.rows[order], weight * tree.root_rows[order]
        q, r = np.linalg.qr(by_root)
        pulled = q.T @ by_store
        dissipated = by_store - q @ pulled
        dissipated -= q @ (q.T @ dissipated)  # once more, against rounding
        roots = -np.linalg.solve(r, pulled) if r.size else np.zeros((0, len(stores)))
        if coils:
            rows, root_rows = tree.coil_rows, tree.coil_root_rows
            inner = np.linalg.solve(r.T, root_rows.T) if r.size else root_rows.T
            from_coils = -np.linalg.solve(r, inner) if r.size else root_rows.T
            roots = np.hstack([roots, from_coils])
            seen = rows + root_rows @ roots[:, : len(stores)]
            a = np.block(
                [
                    [dissipated.T @ dissipated / farads[:, None], seen.T / farads[:, None]],
                    [-seen / henries[:, None], -(root_rows @ from_coils) / henries[:, None]],
                ]
            )
            rates, out = np.linalg.eig(a)
            self.rates: Modal = np.where(np.abs(rates) < _SLOWEST_HZ, _SLOWEST_HZ, rates)
            self.out: Modal = out
            self.into: Modal = np.linalg.inv(out)
            inverse = np.concatenate([1.0 / farads, np.zeros(len(coils))])
            self.drive: Modal = self.into * inverse
        else:
            root_c = np.sqrt(farads)
            b = dissipated / root_c
            if b.shape[0] < b.shape[1]:
                b = np.vstack([b, np.zeros((b.shape[1] - b.shape[0], b.shape[1]))])
            _, singular, v = np.linalg.svd(b, full_matrices=False)
            self.rates = np.maximum(singular**2, _SLOWEST_HZ)
            self.out = v.T / root_c[:, None]
            self.into = v * root_c
            self.drive = v / root_c
        self._tree = tree
        self._roots = roots
        self._rows: dict[str, Array] = {}

    def node(self, name: str) -> Array:
        """The voltage of a node per unit of each state."""
        known = self._rows.get(name)
        if known is not None:
            return known
        row = np.zeros(len(self.names))
        stores = self._tree.volts[name]
        row[: len(stores)] = stores
        root = self._tree.root_of[name]
        if root:
            row += self._roots[root - 1]
        self._rows[name] = row
        return row

    def across(self, a: str, b: str) -> Array:
        """The voltage from node a to node b per unit of each state."""
        found: Array = self.node(a) - self.node(b)
        return found

    @cached_property
    def nodes(self) -> frozenset[str]:
        """Every node."""
        return frozenset(self._tree.root_of)


Ends = tuple[tuple[str, str], ...]


@lru_cache(maxsize=512)
def _tree(resistors: Ends, stores: Ends, coils: Ends, ground: str) -> "_Tree":
    return _Tree(resistors, stores, coils, ground)


class _Tree:
    """Nodes in clusters that stores join; within one, voltages are sums of the stores'.

    Cluster 0 holds the ground and has no unknown; each other cluster has one, its root. It
    hangs on what is joined alone, not on how large anything is.
    """

    def __init__(self, resistors: Ends, stores: Ends, coils: Ends, ground: str) -> None:
        self._stores = len(stores)
        beside: dict[str, list[tuple[str, int, float]]] = {}
        for place, (a, b) in enumerate(stores):
            beside.setdefault(a, []).append((b, place, -1.0))
            beside.setdefault(b, []).append((a, place, 1.0))
        self.root_of: dict[str, int] = {}
        self.volts: dict[str, Array] = {}
        clusters = 0
        every = dict.fromkeys([*beside, *(end for ends in (*resistors, *coils) for end in ends)])
        first = [ground] if ground in every else []
        for start in [*first, *every]:
            if start in self.root_of:
                continue
            self._grow(start, clusters, beside)
            clusters += 1
        self._unknowns = clusters - 1
        self.rows, self.root_rows = self._rows(resistors)
        self.coil_rows, self.coil_root_rows = self._rows(coils)

    def _grow(
        self, start: str, root: int, beside: Mapping[str, list[tuple[str, int, float]]]
    ) -> None:
        self.root_of[start] = root
        self.volts[start] = np.zeros(self._stores)
        queue = [start]
        while queue:
            here = queue.pop()
            for there, place, sign in beside.get(here, ()):
                if there in self.root_of:
                    continue
                self.root_of[there] = root
                self.volts[there] = self.volts[here].copy()
                self.volts[there][place] += sign
                queue.append(there)

    def _rows(self, joined: Ends) -> tuple[Array, Array]:
        """The voltage from end to end of each, per unit of each store and of each root."""
        rows = np.zeros((len(joined), self._stores))
        roots = np.zeros((len(joined), self._unknowns))
        for place, (a, b) in enumerate(joined):
            rows[place] = self.volts[a] - self.volts[b]
            for end, sign in ((a, 1.0), (b, -1.0)):
                if self.root_of[end]:
                    roots[place, self.root_of[end] - 1] += sign
        return rows, roots


@dataclass(frozen=True, slots=True)
class Edge:
    """Something happens once row·x + offset + slope·t rises to 0, t from the course's begin."""

    what: str
    whose: str
    row: Array
    offset: float
    slope: float = 0.0


class Course:
    """How one circuit goes on from an instant, as long as nothing switches.

    ``state`` is x at ``began_s``; ``fed`` and ``rising`` are currents into the stores (A) and
    their rates (A/s).
    """

    PER_DECADE = 6
    FIRST_S = 1e-9

    def __init__(
        self, modes: Modes, state: Array, fed: Array, rising: Array, began_s: float
    ) -> None:
        self.modes = modes
        self.began_s = began_s
        self._y = modes.into @ state
        self._fed = (modes.drive @ fed) / modes.rates
        self._rising = (modes.drive @ rising) if rising.any() else None
        self._looked, self._looked_s = state, math.nan

    def at(self, now_s: float) -> Array:
        """The state x at an instant."""
        return self.after(now_s - self.began_s)

    def after(self, elapsed_s: float) -> Array:
        """The state x so long after ``began_s``, to where the clock itself is too coarse.

        Several instruments look at one instant: the last one is remembered, and not to be written.
        """
        if elapsed_s != self._looked_s:
            self._looked = np.real(self.modes.out @ self._modal(elapsed_s))
            self._looked_s = elapsed_s
        return self._looked

    def _modal(self, t: float) -> Modal:
        """y(t) = e^(−λt)·y(0) + φ₁·fed + φ₂·rising; φ₁ = ∫e^(−λs)ds, φ₂ = ∫φ₁ds over 0…t."""
        if t == 0.0:
            return self._y
        x = self.modes.rates * t
        gone = -np.expm1(-x)
        found = self._y + gone * (self._fed - self._y)
        if self._rising is not None:
            found = found + t * t * _phi2(x, gone) * self._rising
        return found

    def first(self, edges: Sequence[Edge], horizon_s: float) -> tuple[float, Edge] | None:
        """The edge that is reached first, and when, t counted from ``began_s``; or None.

        Looked for at instants spaced evenly over log t, then narrowed down; two crossings of
        one edge between neighbours go unseen.
        """
        if not edges:
            return None
        c = np.array([edge.row for edge in edges]) @ self.modes.out
        offsets = np.array([edge.offset for edge in edges])
        slopes = np.array([edge.slope for edge in edges])
        begins = np.real(c @ self._y) + offsets
        if begins.max() >= 0.0:
            return 0.0, edges[int(begins.argmax())]
        if self._rising is None and not slopes.any() and not np.iscomplexobj(c):
            # each mode moves one way only: between its begin and its end
            most = np.maximum(c * self._y, c * self._modal(horizon_s)).sum(axis=1) + offsets
            if most.max() < 0.0:
                return None
        times = _spread(self.FIRST_S, horizon_s, self.PER_DECADE)
        values = self._many(c, times) + offsets[:, None] + slopes[:, None] * times
        above = (values >= 0.0).any(axis=0)
        place = int(above.argmax())
        if not above[place]:
            return None
        found: tuple[float, Edge] | None = None
        for number in map(int, np.flatnonzero(values[:, place] >= 0.0)):
            low, low_value = (
                (float(times[place - 1]), float(values[number, place - 1]))
                if place
                else (0.0, float(begins[number]))
            )
            edge, row = edges[number], c[number]
            at_s = _narrow(
                lambda t, edge=edge, row=row: (  # type: ignore[misc]
                    float(np.real(row @ self._modal(t))) + edge.offset + edge.slope * t
                ),
                low,
                low_value,
                float(times[place]),
                float(values[number, place]),
            )
            if found is None or at_s < found[0]:
                found = at_s, edge
        return found

    def _many(self, c: Modal, times: Array) -> Array:
        x = np.outer(self.modes.rates, times)
        gone = -np.expm1(-x)
        values = (c @ self._y)[:, None] + (c * (self._fed - self._y)) @ gone
        if self._rising is not None:
            values = values + ((c * self._rising) @ _phi2(x, gone)) * times * times
        found: Array = np.real(values)
        return found


def _spread(first_s: float, last_s: float, per_decade: int) -> Array:
    decades = max(math.log10(last_s / first_s), 0.5)
    count = max(int(per_decade * decades), 6)
    return first_s * 10.0 ** np.linspace(0.0, decades, count)


def _phi2(x: Modal, gone: Modal) -> Modal:
    """(x − (1 − e^(−x)))/x²; 1/2 where the difference would cancel."""
    return np.where(np.abs(x) < 1e-6, 0.5, (x - gone) / (x * x))


def _narrow(
    value: Callable[[float], float], low: float, low_value: float, high: float, high_value: float
) -> float:
    """The root between two instants: false position, a standing end halved (Illinois)."""
    moved = 0
    for _ in range(60):
        if high - low <= 1e-12 * high:
            break
        middle = low + (high - low) * low_value / (low_value - high_value)
        if not low < middle < high:
            middle = 0.5 * (low + high)
        found = value(middle)
        if found >= 0.0:
            high, high_value = middle, found
            low_value *= 0.5 if moved == 1 else 1.0
            moved = 1
        else:
            low, low_value = middle, found
            high_value *= 0.5 if moved == -1 else 1.0
            moved = -1
    return high
