"""A problem: everything physics has to say about a run, and nothing about how it is run."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TypeAlias

from breakstep.errors import DeclarationError
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import AXIS_NAMES, Edge, Mesh
from breakstep.mesh.shown import columns, facts, listed
from breakstep.mesh.tiling import Tile, Tiling
from breakstep.steps.modules import Source
from breakstep.steps.splitting import Splitting
from breakstep.steps.step import Array

Initial: TypeAlias = Callable[[Tile, Mesh], Mapping[str, Array]]


@dataclass(frozen=True)
class Problem:
    """Mesh, fields, splitting and initial state.

    Parameters
    ----------
    name, title : str
    mesh : Mesh
    fields : tuple of Field
    splitting : Splitting
    initial : callable
        ``initial(tile, mesh) -> {field: array of shape (components, nx, ny, nz)}``: a pure function of where
        the tile lies, so that any tiling gives the same zones. Must be picklable.
    cycles : int
        Most cycles to run.
    ended : callable, optional
        ``ended(first reduction's value) -> bool``: stop before the cycle that would use that value.
    sources : tuple of Source
        Files that its functions were loaded from, so that workers can load them too; the command line adds them.

    Raises
    ------
    DeclarationError
        A step names an unknown field; a fixed edge has no values; two fields share a name.
    """

    name: str
    title: str
    mesh: Mesh
    fields: tuple[Field, ...]
    splitting: Splitting
    initial: Initial
    cycles: int
    ended: Callable[[Array], bool] | None = None
    sources: tuple[Source, ...] = ()

    def __post_init__(self) -> None:
        names = [field.name for field in self.fields]
        if len(set(names)) < len(names):
            raise DeclarationError(f"two fields share a name among {', '.join(names)}")
        taken = {*AXIS_NAMES, *(f"{name}_component" for name in names)}  # dimensions of the final fields
        for name in names:
            if name in taken:
                raise DeclarationError(
                    f"a field cannot be named {name!r}: that is a dimension of the fields of a profile;"
                    " choose another name"
                )
        if self.cycles < 1:
            raise DeclarationError(f"a run needs at least one cycle, not {self.cycles}")
        if self.ended is not None and not self.splitting.reductions:
            raise DeclarationError("a run that ends by a value needs a reduction that yields it")
        self.splitting.check_fields(self.by_name())
        self._check_fixed_edges()
        self._check_tile_values()

    def by_name(self) -> dict[str, Field]:
        """Fields by name."""
        return {field.name: field for field in self.fields}

    def _repr_html_(self) -> str:
        """Mesh, fields and splitting, for notebooks."""
        rows = [
            (f.name, listed(f.components), listed(dict.fromkeys(f.units)), "within a cycle" if f.scratch else "state")
            for f in self.fields
        ]
        fields = columns("Fields", ("name", "components", "units", "lives"), rows)
        title = facts(self.title or self.name, [("name", self.name), ("cycles at most", self.cycles)])
        return title + self.mesh._repr_html_() + fields + self.splitting._repr_html_()

    def _check_tile_values(self) -> None:
        fields = self.by_name()
        for owner, read in self.splitting.halo_reads():
            if fields[read.field].per_tile:
                raise DeclarationError(
                    f"step {owner!r} reads field {read.field!r} with a halo, but it holds one value a tile"
                )

    def _check_fixed_edges(self) -> None:
        fields = self.by_name()
        for owner, read in self.splitting.halo_reads():
            for axis in range(self.mesh.dimensions):
                for side in (0, 1):
                    fixed = self.mesh.edge(axis, side) is Edge.FIXED and read.halo[axis] > 0
                    if fixed and (axis, side) not in fields[read.field].fixed:
                        raise DeclarationError(
                            f"step {owner!r} reads field {read.field!r} beyond the fixed"
                            f" {('low', 'high')[side]} {AXIS_NAMES[axis]} edge, but the field gives no values there"
                        )

    def cut(self, tile_shape: tuple[int, ...]) -> Tiling:
        """Cut the mesh into tiles that every halo fits.

        Raises
        ------
        TilingError
            A tile does not fit the mesh, or a halo reaches past the next tile.
        """
        tiling = Tiling(self.mesh, tile_shape)
        for owner, read in self.splitting.halo_reads():
            tiling.require_halo(read.halo, f"step {owner!r}")
        return tiling
