"""Mesh a label volume, all labels conforming, or a closed surface (STL, PLY, VTK and the like)."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console
from .reading import reading_arguments, reading_of
from .usage import positive_mm

HELP = "multi-label tetrahedral mesh"
EXAMPLE = "volmap mesh visit0_labels.nii.gz --out visit0.vtu --edge 2.5"


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("file", type=Path, metavar="FILE", help="label volume or closed surface")
    parser.add_argument("--out", type=Path, required=True, metavar="MESH.vtu", help="where to write the mesh")
    parser.add_argument(
        "--edge", type=positive_mm, metavar="MM", help="edge length (default: about 40,000 tets)"
    )
    reading_arguments(parser)
    parser.add_argument("--overwrite", action="store_true", help="replace a mesh that stands there")


def run(options: argparse.Namespace, console: Console) -> int:
    """Mesh and show the quality table."""
    from volmap import pipeline

    result = pipeline.mesh_file(
        options.file,
        options.out,
        pipeline.MeshSettings(edge_mm=options.edge),
        reading=reading_of(options),
        overwrite=options.overwrite,
        progress=console.progress,
    )
    quality = result.quality
    console.say(
        f"{quality.tets} tets, {quality.points} points, dihedral angles {quality.min_dihedral_deg:.1f} to "
        f"{quality.max_dihedral_deg:.1f} degrees, edge {result.settings.edge_mm:.3g} mm"
    )
    for row in quality.rows:
        console.say(
            f"  {row.label} {row.name}: {row.tets} tets, {row.volume_mm3:.1f} mm3 "
            f"({row.volume_error_pct:+.3f} % of its voxels), pieces {row.pieces}, Euler {row.euler}"
        )
    for finding in result.findings:
        console.say(finding.line)
    console.say(f"wrote {options.out}")
    findings = [finding.as_dict() for finding in result.findings]
    document = {"quality": result.quality.as_dict(), "edge_mm": result.settings.edge_mm, "findings": findings}
    console.result(document)
    console.end()
    return 0
