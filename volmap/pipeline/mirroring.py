"""Left and right: does the mirror image of a scan fit its partner better than the scan itself?"""

from __future__ import annotations

from typing import Any

from volmap.mapping import MapSettings, MirrorTrial, Solved, mirror_trial
from volmap.types import Finding, LabelVolume, Level, Surface, TetMesh


def mirror_compared(
    mesh: TetMesh, target: Surface, solved: Solved, settings: MapSettings
) -> MirrorTrial | None:
    """The comparison for a pair that was aligned from every start; None where the user chose one start."""
    if settings.start != "auto" or len(solved.tried) < 2:
        return None
    return mirror_trial(mesh.interfaces, target, solved.tried, seed=settings.seed)


def mirror_findings(
    trial: MirrorTrial | None, source: LabelVolume, target: LabelVolume
) -> tuple[Finding, ...]:
    """A warning when left and right seem to be swapped between the two scans; else nothing."""
    if trial is None or not trial.mirrored_fits_better:
        return ()
    sentence = (
        f"the mirror image of {source.name} fits {target.name} clearly better than {source.name} itself "
        f"(label surfaces {trial.mirrored_mm:.2f} mm apart after an affine fit, against "
        f"{trial.residual_mm:.2f} mm): left and right may be swapped in one of the two scans, or they show "
        "organs of opposite sides, which no map without folds can undo; check the orientation of both files "
        "with a mark whose side is known"
    )
    return (Finding(Level.WARN, "mirror-image", f"{source.name} and {target.name}", sentence),)


def mirror_document(trial: MirrorTrial | None) -> dict[str, Any]:
    """What the certificate keeps of the comparison."""
    if trial is None:
        return {}
    return {
        "mirror_image": {
            "residual_mm": trial.residual_mm,
            "mirrored_residual_mm": trial.mirrored_mm,
            "fits_better": trial.mirrored_fits_better,
        }
    }
