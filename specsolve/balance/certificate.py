"""What a search looked at and what became of it, in numbers and in words."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True)
class Certificate:
    """Account of one search for all minima.

    Attributes
    ----------
    n_nodes, n_blank : int
        Nodes of (teff, logg, mh, vmic) with residuals, and without (no atmosphere, or a line without widths there).
    n_cells, n_partial : int
        Cells with all corners, and cells with some that were tested on those.
    n_kept : int
        Cells in which all residuals can vanish: signs at the corners, with a margin for the curvature between them.
    n_landed : int
        Of these, the cells whose Gauss-Newton step lands in the cell or less than one cell away.
    n_lattice : int
        Nodes at which the objective is less than at all neighbours.
    n_starts, n_refined : int
        Starting points after merging, and how many of them were refined.
    n_failed, n_same, n_distinct : int
        Refinements that led nowhere, that ended at a minimum known already, and distinct minima.
    n_edge, n_beside_missing, n_stopped : int
        Distinct minima at an edge of the grid, beside a missing node, and stopped by one or by the edge.
    """

    n_nodes: int = 0
    n_blank: int = 0
    n_cells: int = 0
    n_partial: int = 0
    n_kept: int = 0
    n_landed: int = 0
    n_lattice: int = 0
    n_starts: int = 0
    n_refined: int = 0
    n_failed: int = 0
    n_same: int = 0
    n_distinct: int = 0
    n_edge: int = 0
    n_beside_missing: int = 0
    n_stopped: int = 0

    @property
    def complete(self) -> bool:
        """Whether every starting point was refined."""
        return self.n_refined == self.n_starts

    def words(self) -> str:
        """One line for the record of decisions.

        Examples
        --------
        >>> Certificate(n_nodes=10, n_starts=3, n_refined=2).words().split("; ")[-1]
        'more starting points than the limit'
        """
        parts = [
            f"{self.n_nodes} nodes scanned ({self.n_blank} without widths)",
            f"{self.n_kept} of {self.n_cells + self.n_partial} cells kept ({self.n_partial} beside missing nodes)",
            f"{self.n_landed} steps that land near their cell and {self.n_lattice} lowest nodes: "
            f"{self.n_starts} starting points",
            f"{self.n_refined} refined: {self.n_distinct} minima, {self.n_same} repeats, {self.n_failed} led nowhere",
            f"{self.n_edge} at an edge, {self.n_beside_missing} beside missing nodes, {self.n_stopped} stopped by either",
        ]
        if not self.complete:
            parts.append("more starting points than the limit")
        return "; ".join(parts)
