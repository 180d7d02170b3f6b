"""The equations of a grid: conductances between nodes, currents fed in, nodes that are one, nodes held at the terminal.

Potentials x are relative to the node's own terminal and u = V + B x is the local cell voltage at the points that feed
(+1 for holes, −1 for electrons in the rows of B, times the shape functions). Then

    K x − Bᵀ [w J(V + B x)] = 0        I = Σ w J(u)        xᵀ K x + V I = Σ w u J(u)

where the last line, the balance of power, is the first one multiplied by xᵀ.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import Complaints
from ..units import MM

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .cell_current import Law
    from .placing import PlacedLine

GAUSS_POINTS, GAUSS_WEIGHTS = (
    np.array([0.5 - 0.15**0.5, 0.5, 0.5 + 0.15**0.5]), np.array([5.0, 8.0, 5.0]) / 18
)  # fmt: skip
"""Three-point Gauss rule on [0, 1]."""


def shapes(t: Any) -> NDArray[np.float64]:
    """Quadratic shape functions of start, end and middle at t in [0, 1], shape (3, …)."""
    return np.array([(1 - t) * (1 - 2 * t), t * (2 * t - 1), 4 * t * (1 - t)])


def shape_slopes(t: Any) -> NDArray[np.float64]:
    """Their derivatives in t."""
    return np.array([4 * t - 3, 4 * t - 1, 4 - 8 * t])


@dataclass(frozen=True, eq=False)
class Part:
    """Named conductances: xᵀ K x is the power lost in them, W.

    Parameters
    ----------
    kind, name : str
    K : scipy sparse matrix, shape (n_nodes, n_nodes)
        S.
    """

    kind: str
    name: str
    K: Any


@dataclass(frozen=True, eq=False)
class Source:
    """Points that feed current.

    Parameters
    ----------
    name : str
        "lit", "under finger", …
    boxes : (4, n) float array
        x_min, x_max, y_min, y_max that each point stands for, cm.
    weight : (n,) float array
        Area in cm² (length in cm for edges).
    B : scipy sparse matrix, shape (n, n_nodes)
    laws : tuple of (str, Law)
        From the unshaded cell's law to the one that holds here; each name tells what the step to it costs.
    """

    name: str
    boxes: NDArray[np.float64]
    weight: NDArray[np.float64]
    B: Any
    laws: tuple[tuple[str, Law], ...]

    @property
    def law(self) -> Law:
        """The law that holds."""
        return self.laws[-1][1]


@dataclass(frozen=True, eq=False)
class Line:
    """A placed line with its nodes.

    Parameters
    ----------
    placed : PlacedLine
    s : (n + 1,) float array
        Ends of its n elements, cm.
    nodes : (3, n) int array
        Start, end and middle node of each.
    width_um : (n + 1,) float array
        Width at the ends of the elements.
    """

    placed: PlacedLine
    s: NDArray[np.float64]
    nodes: NDArray[np.int64]
    width_um: NDArray[np.float64]

    @property
    def vertices(self) -> NDArray[np.int64]:
        """Nodes at the ends of the elements, shape (n + 1,)."""
        return np.append(self.nodes[0], self.nodes[1, -1])

    def at(self, s: float) -> int:
        """The node at a place that is an end of an element."""
        return int(self.vertices[int(np.argmin(np.abs(self.s - s)))])

    def values(self, s: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
        """Nodes and shape functions at places, each (3, n); beyond an end, the end's."""
        k = np.clip(np.searchsorted(self.s, s) - 1, 0, self.s.size - 2)
        t = np.clip((s - self.s[k]) / (self.s[k + 1] - self.s[k]), 0.0, 1.0)
        return self.nodes[:, k], shapes(t)


@dataclass(eq=False)
class Builder:
    """Collects nodes, conductances, sources, ties and terminals.

    Parameters
    ----------
    places : list of (2, n) arrays
        x and y of the nodes, cm.
    """

    places: list[NDArray[np.float64]] = field(default_factory=list)
    labels: list[tuple[int, str]] = field(default_factory=list)
    n: int = 0
    entries: dict[tuple[str, str], list[tuple[Any, Any, Any]]] = field(default_factory=dict)
    feeds: list[tuple[Any, ...]] = field(default_factory=list)
    ties: list[NDArray[np.int64]] = field(default_factory=list)
    grounded: list[int] = field(default_factory=list)
    lines: list[Line] = field(default_factory=list)

    def add_nodes(self, places: NDArray[np.float64], label: str) -> NDArray[np.int64]:
        """New nodes at places (2, n) in cm; `label` names them in refusals."""
        self.places.append(places)
        self.labels.append((self.n, label))
        first, self.n = self.n, self.n + places.shape[1]
        return np.arange(first, self.n)

    def tie(self, nodes: Any) -> None:
        """Make nodes one."""
        self.ties.append(np.asarray(nodes, dtype=np.int64))

    def couple(
        self,
        kind: str,
        name: str,
        nodes: NDArray[np.int64],
        differences: NDArray[np.float64],
        w: NDArray[np.float64],
        per_cell: int = 1,
    ) -> None:
        """Conductances w (n,) on differences Σ_k differences[k] x[nodes[k]], both of shape (m, n).

        Each `per_cell` neighbouring ones share their nodes and are summed.
        """
        m = nodes.shape[0]
        nodes = nodes[:, ::per_cell]
        d = differences.reshape(m, -1, per_cell)
        values = np.einsum("anq,bnq->abn", d * w.reshape(-1, per_cell), d)
        rows = np.repeat(nodes[:, None], m, axis=1)
        self.entries.setdefault((kind, name), []).append((rows, rows.swapaxes(0, 1), values))

    def resistor(self, kind: str, name: str, a: int, b: int | None, conductance: float) -> None:
        """A resistor between two nodes, or between one and its terminal (b None)."""
        nodes = np.array([[a]] if b is None else [[a], [b]])
        self.couple(kind, name, nodes, np.array([[1.0], [-1.0]])[: nodes.shape[0]], np.array([conductance]))

    def feed(
        self,
        name: str,
        boxes: NDArray[np.float64],
        weight: NDArray[np.float64],
        nodes: NDArray[np.int64],
        values: NDArray[np.float64],
        laws: tuple[tuple[str, Law], ...],
    ) -> None:
        """A source at n points; nodes and values of B are (m, n). Points without weight are left out."""
        on = np.flatnonzero(weight > 0)
        if on.size:
            self.feeds.append((name, boxes[:, on], weight[on], nodes[:, on], values[:, on], laws))

    def terminal(self, node: int, name: str, conductance: float | None) -> None:
        """Hold a node at the terminal, directly or through a conductance."""
        if conductance is None:
            self.grounded.append(node)
        else:
            self.resistor("terminal", name, node, None, conductance)

    def label_of(self, node: int) -> str:
        """What a node belongs to."""
        starts = np.array([first for first, _ in self.labels])
        return self.labels[int(np.searchsorted(starts, node, side="right")) - 1][1]

    def circuit(self) -> Circuit:
        """The finished equations.

        Raises
        ------
        InputError
            A part of the cell without any path to its terminal.
        """
        import scipy.sparse as sp

        shape = (self.n, self.n)
        parts = []
        for (kind, name), triples in self.entries.items():
            rows, columns, values = (np.concatenate([np.ravel(t[i]) for t in triples]) for i in range(3))
            parts.append(Part(kind, name, sp.csr_matrix((values, (rows, columns)), shape=shape)))
        sources = []
        for name, boxes, weight, nodes, values, laws in self.feeds:
            rows = np.broadcast_to(np.arange(weight.size), nodes.shape)
            B = sp.csr_matrix((values.ravel(), (rows.ravel(), nodes.ravel())), shape=(weight.size, self.n))
            sources.append(Source(name, boxes, weight, B, laws))
        owner, islands = self._owners(parts)
        self._check_paths(owner, islands, sources)
        free = np.ones(int(owner.max()) + 1, dtype=bool)
        free[owner[self.grounded]] = False
        free[np.unique(owner[self._unused(parts, sources)])] = False
        number = np.cumsum(free) - 1
        used = np.flatnonzero(free[owner])
        T = sp.csr_matrix((np.ones(used.size), (used, number[owner[used]])), shape=(self.n, int(free.sum())))
        return Circuit(np.hstack(self.places), tuple(parts), tuple(sources), T, tuple(self.lines))

    def _owners(self, parts: list[Part]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """For each node, the number of the unknown it shares through ties; and its island joined by conductances."""
        import scipy.sparse as sp
        from scipy.sparse.csgraph import connected_components

        ties = [np.vstack([t[:-1], t[1:]]) for t in self.ties if t.size > 1]
        pairs = np.hstack(ties) if ties else np.zeros((2, 0), dtype=np.int64)
        joined = sp.csr_matrix((np.ones(pairs.shape[1]), pairs), shape=(self.n, self.n))
        owner = connected_components(joined, directed=False)[1]
        conductances = sum((abs(p.K) for p in parts), joined)
        return owner.astype(np.int64), connected_components(conductances, directed=False)[1].astype(np.int64)

    def _unused(self, parts: list[Part], sources: list[Source]) -> NDArray[np.int64]:
        """Nodes that neither conduct nor feed; ties bring none of them to life."""
        touched = np.zeros(self.n, dtype=bool)
        for part in parts:
            touched[part.K.indices] = True
        for source in sources:
            touched[source.B.indices] = True
        tied = np.concatenate([np.zeros(0, dtype=np.int64), *self.ties])
        touched[tied] = True
        return np.flatnonzero(~touched)

    def _check_paths(self, owner: NDArray[np.int64], islands: NDArray[np.int64], sources: list[Source]) -> None:
        """Every island that is fed needs a node at the terminal, or a resistor to it."""
        fed = np.unique(np.concatenate([islands[s.B.indices] for s in sources]))
        resistors = [
            np.ravel(t[0]) for (kind, _), triples in self.entries.items() if kind == "terminal" for t in triples
        ]
        ends = np.concatenate([np.asarray(self.grounded, dtype=np.int64), *resistors])
        lost = np.setdiff1d(fed, islands[ends])
        problems = Complaints("grid")
        places = np.hstack(self.places)
        for island in lost[:3]:
            members = np.flatnonzero(islands == island)
            x, y = places[:, members].mean(axis=1) / MM
            given = f"{self.label_of(int(members[0]))} around ({x:.4g}, {y:.4g}) mm has no path to a terminal"
            problems.add(given, "metal or a sheet from every part of the cell to a collection point or wire end")
        problems.raise_if_any()


@dataclass(frozen=True, eq=False)
class Circuit:
    """Finished equations.

    Parameters
    ----------
    places : (2, n_nodes) float array
        cm.
    parts : tuple of Part
    sources : tuple of Source
    T : scipy sparse matrix, shape (n_nodes, n_unknowns)
        All potentials from the free ones.
    lines : tuple of Line
    """

    places: NDArray[np.float64]
    parts: tuple[Part, ...]
    sources: tuple[Source, ...]
    T: Any
    lines: tuple[Line, ...]
