"""What a certificate is made from."""

from __future__ import annotations

from dataclasses import dataclass

from volmap.types.given_boundary import GivenBoundary, GivingWay
from volmap.types.gridfield import GridField
from volmap.types.landmarks import LandmarkPairs
from volmap.types.outcome import Status
from volmap.types.surface import Surface
from volmap.types.volume_map import VolumeMap
from volmap.types.volumes import LabelVolume


@dataclass(frozen=True, eq=False)
class Evidence:
    """A map and everything it can be held against.

    Parameters
    ----------
    map : VolumeMap
    source, target : LabelVolume
    source_surface, target_surface : Surface
        Label surfaces of the scans' own meshes, in their own worlds, normals from ``sides[:, 0]`` to
        ``sides[:, 1]``.
    forward : GridField, optional
        On SOURCE's grid, pointing into TARGET.
    backward : GridField, optional
        On TARGET's grid, pointing into SOURCE.
    other : VolumeMap, optional
        The same pair solved on TARGET's mesh: its mesh is TARGET's body, its images lie in SOURCE.
    alone : (VolumeMap, VolumeMap), optional
        `map` and `other` as they were before the two solves were drawn together; None when they never were.
    checks : LandmarkPairs, optional
        Of these only the pairs of role 'check' are used.
    status : Status, optional
        How the solve ended.
    source_mesh_labels, target_mesh_labels : LabelVolume, optional
        A scan's own mesh drawn on its own grid: what Dice a mesh can score at all.
    solved_on : str
        'source' or 'target': whose own mesh the tets of the map are.
    given : GivenBoundary, optional
        The boundary correspondence the map was asked to keep, from SOURCE to TARGET.
    giving_way : tuple of GivingWay
        What other tolerances would cost, as the solver told it.
    """

    map: VolumeMap
    source: LabelVolume
    target: LabelVolume
    source_surface: Surface
    target_surface: Surface
    forward: GridField | None = None
    backward: GridField | None = None
    other: VolumeMap | None = None
    alone: tuple[VolumeMap, VolumeMap] | None = None
    checks: LandmarkPairs | None = None
    status: Status | None = None
    source_mesh_labels: LabelVolume | None = None
    target_mesh_labels: LabelVolume | None = None
    solved_on: str = "source"
    given: GivenBoundary | None = None
    giving_way: tuple[GivingWay, ...] = ()

    @property
    def voxel_mm(self) -> float:
        """ "One voxel" of a pair as a length: that of the coarser scan, mm."""
        return max(self.source.grid.voxel_mm, self.target.grid.voxel_mm)

    def name_of(self, label: int) -> str:
        """Name of a label, from the source or else the target."""
        return self.source.name_of(label) if label in self.source.names else self.target.name_of(label)
