"""Map the inside of SOURCE onto the inside of TARGET; write a map folder with certificate and report."""

from __future__ import annotations

import argparse
from pathlib import Path

from .console import Console
from .reading import reading_arguments, reading_of
from .usage import UsageError, positive_mm, whole_number

HELP = "certified volumetric map between two label volumes"
EXAMPLE = "volmap map visit0_labels.nii.gz visit1_labels.nii.gz --out map_0_1"
ENERGIES = ("soft-tissue", "neo-hookean", "symmetric-dirichlet", "arap", "log-strain", "conformal")


def arguments(parser: argparse.ArgumentParser) -> None:
    """Options of this verb."""
    parser.add_argument("source", type=Path, metavar="SOURCE", help="label volume (NIfTI, NRRD, DICOM)")
    parser.add_argument("target", type=Path, metavar="TARGET", help="label volume with the same labels")
    parser.add_argument("--out", type=Path, required=True, metavar="DIR", help="map folder to write")
    parser.add_argument("--overwrite", action="store_true", help="replace a map folder that stands there")
    parser.add_argument(
        "--edge", type=positive_mm, metavar="MM", help="mesh edge (default: about 40,000 tets)"
    )
    parser.add_argument("--guides", type=Path, metavar="CSV", help="landmark pairs, roles guide and check")
    parser.add_argument(
        "--boundary",
        type=Path,
        metavar="FILE",
        help="surface on SOURCE's boundary with `image_mm` on its points (VTP, VTU, VTK, PLY): keep it",
    )
    parser.add_argument(
        "--boundary-tolerance",
        type=positive_mm,
        metavar="MM",
        help="how far the map may leave it (default: a quarter of a voxel)",
    )
    parser.add_argument(
        "--energy", choices=ENERGIES, default=ENERGIES[0], help=f"distortion energy (default {ENERGIES[0]})"
    )
    parser.add_argument(
        "--uncertainty",
        type=positive_mm,
        metavar="MM",
        help="declared uncertainty of the segmentations (default: a tenth of a voxel)",
    )
    reading_arguments(parser, pair=True)
    parser.add_argument(
        "--source-image", type=Path, metavar="IMAGE", help="intensities to show in the report"
    )
    parser.add_argument(
        "--target-image", type=Path, metavar="IMAGE", help="intensities to show in the report"
    )
    parser.add_argument("--gates", type=Path, metavar="TOML", help="a gate table of your own")
    parser.add_argument(
        "--one-order",
        action="store_true",
        help="do not solve on the other mesh too: a map of one mesh, order not assessed",
    )
    parser.add_argument(
        "--one-to-one",
        action=argparse.BooleanOptionalAction,
        default=True,
        help="keep the image of the outer boundary from crossing itself (default: yes)",
    )
    parser.add_argument(
        "--allow-topology-change",
        action="store_true",
        help="go on when pieces, handles or voids differ; the certificate then fails the gate labels_agree",
    )
    parser.add_argument(
        "--seed", type=whole_number(0), default=0, help="of the subsamples the alignment uses"
    )
    parser.add_argument("--threads", type=whole_number(1), help="threads (default: all)")


def run(options: argparse.Namespace, console: Console) -> int:
    """Map; exit status 1 when a gate failed."""
    from volmap import pipeline
    from volmap.types import InputError

    from .verdict import show

    if options.boundary_tolerance is not None and options.boundary is None:
        raise UsageError("--boundary-tolerance needs --boundary FILE")
    try:
        pipeline.use_threads(options.threads)
    except InputError as fault:
        raise UsageError(fault.sentence) from fault
    job = pipeline.MapJob(
        mesh=pipeline.MeshSettings(edge_mm=options.edge),
        map=pipeline.MapSettings(
            energy=options.energy,
            uncertainty_mm=options.uncertainty,
            one_to_one=options.one_to_one,
            seed=options.seed,
        ),
        both_orders=not options.one_order,
        allow_topology_change=options.allow_topology_change,
        gates=options.gates,
    )
    folder = pipeline.map_files(
        options.source,
        options.target,
        options.out,
        job,
        source_reading=reading_of(options, "source_frame"),
        target_reading=reading_of(options, "target_frame"),
        guides=options.guides,
        boundary=options.boundary,
        boundary_tolerance_mm=options.boundary_tolerance,
        source_image=options.source_image,
        target_image=options.target_image,
        overwrite=options.overwrite,
        progress=console.progress,
    )
    failed = show(folder.certificate, console)
    console.say(f"wrote {options.out}; open {options.out / 'report.html'}")
    console.end()
    return failed
