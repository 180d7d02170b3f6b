"""The fixed sparse pattern that local matrices are added into."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

CHUNK_ENTRIES = 400_000
"""Local entries sorted at a time."""


@dataclass(frozen=True, eq=False)
class Pattern:
    """Where every entry of every local matrix goes in a compressed-row matrix.

    Parameters
    ----------
    dofs : (n_cells, n_local) int array
        Unknowns of each cell.
    size : int
        Number of unknowns.
    """

    dofs: NDArray[np.int64]
    size: int

    @cached_property
    def _built(self) -> tuple[NDArray[np.int32], NDArray[np.int32], NDArray[np.int32]]:
        """Slots (n_cells n_local, n_local), columns (n_entries,), row starts (n + 1,).

        Rows are treated in portions, each sorted by (row, column), so that memory stays near that of the slots.
        """
        n_local = self.dofs.shape[1]
        order = np.argsort(self.dofs.ravel(), kind="stable")  # rows of local matrices by unknown
        row = self.dofs.ravel()[order]
        slots = np.empty((order.size, n_local), dtype=np.int32)
        columns, counts, done = [], np.zeros(self.size, dtype=np.int64), 0
        for part in self._portions(row, n_local):
            local, rows = order[part], row[part]
            key = (rows - rows[0]).astype(np.int64)[:, None] * self.size + self.dofs[local // n_local]
            found, slot = np.unique(key.ravel(), return_inverse=True)
            slots[local] = slot.reshape(key.shape) + done
            columns.append((found % self.size).astype(np.int32))
            counts += np.bincount(found // self.size + rows[0], minlength=self.size)
            done += found.size
        starts = np.concatenate([[0], np.cumsum(counts)])
        return slots, np.concatenate(columns), starts.astype(np.int32)

    def _portions(self, row: NDArray[np.int64], n_local: int) -> list[slice]:
        """Pieces of the sorted rows; no unknown lies in two of them."""
        step = max(1, CHUNK_ENTRIES // n_local)
        cuts = np.searchsorted(row, row[step::step])
        cuts = np.unique(np.concatenate([[0], cuts, [row.size]]))
        return [slice(int(a), int(b)) for a, b in pairwise(cuts)]

    def add(self, data: NDArray[Any], part: slice, local: NDArray[Any]) -> None:
        """Add the local matrices (n_part, n_local²) of the cells in `part` to the entries `data`."""
        n_local = self.dofs.shape[1]
        slots = self._built[0][part.start * n_local : part.stop * n_local]
        np.add.at(data, slots.ravel(), local.ravel())

    @property
    def entries(self) -> int:
        """Number of stored entries."""
        return int(self._built[1].size)

    def matrix(self, data: NDArray[Any]) -> Any:
        """Entries as a sparse matrix (n, n)."""
        from scipy.sparse import csr_matrix

        return csr_matrix((data, self._built[1], self._built[2]), shape=(self.size, self.size))
