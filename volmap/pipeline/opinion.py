"""What a certificate is measured on, and a second opinion on a stored one."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

from volmap import carry as carrying
from volmap import certify as certifying
from volmap.mapfolder import MapFolder, read_map_folder
from volmap.pipeline.doctored import doctored, proofs_of
from volmap.types import Certificate, LabelVolume, Progress, TetMesh, VolumeMap, silent


def evidence_of(folder: MapFolder) -> certifying.Evidence:
    """What a certificate is measured on; from a folder just made or one read back, alike."""
    own = folder.own_meshes
    return certifying.Evidence(
        map=folder.map,
        source=folder.source,
        target=folder.target,
        source_surface=folder.source_surface,
        target_surface=folder.target_surface,
        forward=folder.forward,
        backward=folder.backward,
        other=folder.other,
        alone=folder.alone,
        checks=folder.pairs,
        status=folder.status,
        source_mesh_labels=_voxelised(own.get("source"), folder.source),
        target_mesh_labels=_voxelised(own.get("target"), folder.target),
        solved_on=folder.solved_on,
        given=folder.given,
        giving_way=folder.giving_way,
    )


def _voxelised(mesh: TetMesh | None, volume: LabelVolume) -> LabelVolume | None:
    if mesh is None:
        return None
    return carrying.carried_solid(VolumeMap(mesh, mesh.points), volume.grid, names=volume.names)


@dataclass(frozen=True)
class SecondOpinion:
    """A stored certificate against what its files say now.

    Parameters
    ----------
    certificate : Certificate
        The stored one, with its gates measured anew.
    disagreements : tuple of str
        A sentence for each number or word that is not what the files give.
    not_repeated : tuple of str
        Gates that the files alone cannot repeat.
    proofs : tuple of str
        What each field's check point proved, a sentence a field that stood.
    """

    certificate: Certificate
    disagreements: tuple[str, ...]
    not_repeated: tuple[str, ...]
    proofs: tuple[str, ...] = ()


def certify_folder(path: Path, *, gates: Path | None = None, progress: Progress = silent) -> SecondOpinion:
    """Measure every gate again from a map folder's files alone.

    Raises
    ------
    InputError
        No map folder, or files that are missing, damaged or do not belong together.
    """
    table = certifying.read_gate_table(gates)
    progress("read", 0, 0, path.absolute().name)
    folder = read_map_folder(path)
    fresh, measures = certifying.certify(evidence_of(folder), table, progress=progress)
    stored = folder.certificate
    against = doctored(folder, measures, progress=progress)  # causes first, then the gates they change
    against += [d.sentence for d in certifying.compare(stored, fresh)]
    return SecondOpinion(
        replace(stored, gates=fresh, measures=measures),
        tuple(against),
        certifying.not_repeated(stored, fresh),
        tuple(proof.told for proof in proofs_of(folder) if proof.told),
    )
