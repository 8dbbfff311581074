"""Hard and random pairs: ``python tests/bench/pairs.py [N] [--hard] [--tets M] [--again] [--only NAME ...]``.

N random pairs (200 when not said; seeds 0 to N - 1) and all hard pairs; --hard: the hard ones only.  Rows are
stored in ``tests/bench/pairs.json`` as they come, and a run that was stopped goes on where it was; --again
solves everything anew.  Each pair is screened, meshed at about M tets (8000) and solved at default settings.
Signs and crossings are decided exactly.  The status of a pair that reached its declared uncertainty and came
to rest is SETTLED.
"""

from __future__ import annotations

import argparse
import json
import time
from pathlib import Path

import numpy as np
from volmap_phantoms.hard_pairs import HARD, make_hard
from volmap_phantoms.random_pairs import KINDS, draw

from volmap.certify.buried_boundary import buried_sheets
from volmap.kernels.crossings import triangle_crossings
from volmap.kernels.predicates import orientation_signs
from volmap.kernels.topology import face_corners, match_faces
from volmap.mapping import MapSettings, map_mesh
from volmap.mesh import MeshSettings, mesh_levels
from volmap.pipeline.pair import coarser_bodies
from volmap.screen import screen_pair
from volmap.types import InputError

STORE = Path(__file__).parent / "pairs.json"
WANTED = 0.97  # share that must reach its declared residual


def solved_row(pair, tets: int) -> dict:
    """Screen, mesh and solve one pair; what came of it."""
    begin = time.process_time()
    row = {"name": pair.name, "kind": pair.kind, "wanted_tets": tets, "story": pair.story}
    try:
        screen_pair(pair.source, pair.target).require_mappable()
    except InputError as refusal:
        return row | {"status": "REFUSED", "why": str(refusal), "expected": bool(pair.refusal)}
    here, there = (mesh_levels(v, MeshSettings(wanted_tets=tets)) for v in (pair.source, pair.target))
    results = [here.fine, there.fine]
    meshed = time.process_time()
    settings = MapSettings()
    solved = map_mesh(
        results[0].mesh,
        results[1].mesh.interfaces,
        settings,
        voxel_mm=pair.voxel_mm,
        guides=pair.guides,
        coarser=coarser_bodies(here, there),
    )
    ended = time.process_time()
    outcome = solved.outcome
    inverted, crossing, buried = validity(outcome.map)
    ratio = outcome.map.volume_ratio
    row |= {
        "tets": len(results[0].mesh.tets),
        "edges_per_voxel": results[0].settings.edge_mm / pair.voxel_mm,
        "mesh_findings": [f.code for r in results for f in r.findings],
        "steps": len(outcome.history),
        "linear_iterations": sum(h.linear_iterations for h in outcome.history),
        "status": outcome.status.name,
        "residual_mm": outcome.history[-1].residual_mm,
        "uncertainty_mm": settings.uncertainty_mm or settings.uncertainty_voxels * pair.voxel_mm,
        "distortion": outcome.history[-1].distortion,
        "inverted_tets": inverted,
        "crossings": crossing,
        "buried_parts": buried,
        "J": [float(ratio.min()), *np.percentile(ratio, [0.1, 99.9]), float(ratio.max())],
        "levels": 1 + len(here.coarser),
        "aligned_mm": solved.alignment.residual_mm,
        "start": outcome.start,
        "notes": list(outcome.notes),
        "mesh_s": meshed - begin,
        "solve_s": ended - meshed,
    }
    if pair.guides is not None:
        row["guides_mm"] = _guides_mm(outcome.map, pair.guides)
    if pair.truth is not None:
        row["truth_mm"] = _truth_mm(outcome.map, pair.truth)
    return row


def validity(volume_map) -> tuple[int, int, int]:
    """Inverted tets (mesh and image, exact signs), crossings of the image boundary (exact), buried parts."""
    here, image = volume_map.mesh, volume_map.image_mesh
    inverted = sum(int((orientation_signs(m.points, m.tets) <= 0).sum()) for m in (here, image))
    _, _, hull = match_faces(here.tets)
    triangles = face_corners(here.tets, hull)
    crossing = triangle_crossings(image.points, triangles)
    return inverted, len(crossing), len(buried_sheets(image, triangles, hull // 4))


def _guides_mm(volume_map, guides) -> float:
    from volmap.carry import move_points

    landed = move_points(volume_map, guides.points, reach_mm=3.0).points
    return float(np.linalg.norm(landed - guides.to_points, axis=1).max())


def _truth_mm(volume_map, truth) -> list[float]:
    """Mean and largest error of the mesh points whose true place is known."""
    exact = truth.carry(volume_map.mesh.points, 0, 1)
    known = np.isfinite(exact).all(axis=1)
    error = np.linalg.norm(volume_map.images[known] - exact[known], axis=1)
    return [float(error.mean()), float(error.max())]


def table(rows: list[dict]) -> str:
    """One line a class."""
    lines = [
        f"{'class':10s} {'pairs':>5s} {'settled':>7s} {'not':>4s} {'invert.':>7s} {'cross.':>6s} "
        f"{'steps med/max':>13s} {'tets':>6s} {'residual/declared max':>21s} {'J 0.1-99.9 % worst':>18s} "
        f"{'solve s med/max':>15s}"
    ]
    solved = [r for r in rows if r["status"] != "REFUSED"]
    for kind in [*dict.fromkeys(r["kind"] for r in solved), "all"]:
        of = [r for r in solved if kind in (r["kind"], "all")]
        settled = sum(r["status"] == "SETTLED" for r in of)
        steps, seconds = ([r[key] for r in of] for key in ("steps", "solve_s"))
        worst = max(r["residual_mm"] / r["uncertainty_mm"] for r in of)
        lines.append(
            f"{kind:10s} {len(of):5d} {settled:7d} {len(of) - settled:4d} "
            f"{sum(r['inverted_tets'] for r in of):7d} "
            f"{sum(r['crossings'] + r['buried_parts'] for r in of):6d} "
            f"{np.median(steps):6.0f} {max(steps):6d} {np.median([r['tets'] for r in of]):6.0f} "
            f"{worst:21.2f} "
            f"{min(r['J'][1] for r in of):9.2f}-{max(r['J'][2] for r in of):.2f}   "
            f"{np.median(seconds):7.1f} {max(seconds):7.1f}"
        )
    return "\n".join(lines)


def lines(rows: list[dict]) -> str:
    """One line a pair."""
    told = []
    for r in rows:
        if r["status"] == "REFUSED":
            as_wanted = "as it must be" if r["expected"] else "NOT EXPECTED"
            told.append(f"  {r['name']:28s} REFUSED, {as_wanted}: {r['why']}")
            continue
        told.append(
            f"  {r['name']:28s} {r['status']:20s} "
            f"residual {r['residual_mm']:.3f} of {r['uncertainty_mm']:.3f} mm, "
            f"J {r['J'][0]:.2f}-{r['J'][3]:.2f}, {r['inverted_tets']} inverted, {r['crossings']} crossings, "
            f"{r['steps']} steps, {r['tets']} tets, {r['solve_s']:.1f} s"
            + (f", guides {r['guides_mm']:.2f} mm" if "guides_mm" in r else "")
            + (f", truth {r['truth_mm'][0]:.2f} mm (max {r['truth_mm'][1]:.2f})" if "truth_mm" in r else "")
        )
    return "\n".join(told)


def main() -> None:
    """Solve what is not stored yet, print tables."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("n", nargs="?", type=int, default=200)
    parser.add_argument("--hard", action="store_true")
    parser.add_argument("--tets", type=int, default=8000)
    parser.add_argument("--again", action="store_true")
    parser.add_argument("--only", nargs="*", default=[])
    chosen = parser.parse_args()
    makers = {name: (lambda name=name: make_hard(name)) for name in HARD}
    if not chosen.hard:
        names = {f"{KINDS[seed % len(KINDS)]}-{seed}": seed for seed in range(chosen.n)}
        makers |= {name: (lambda seed=seed: draw(seed)) for name, seed in names.items()}
    if chosen.only:
        makers = {name: make for name, make in makers.items() if name in chosen.only}
    stored = json.loads(STORE.read_text()) if STORE.exists() else {}
    for name, make in makers.items():
        if not chosen.again and stored.get(name, {}).get("wanted_tets") == chosen.tets:
            continue
        stored[name] = solved_row(make(), chosen.tets)
        print(lines([stored[name]]), flush=True)
        STORE.write_text(json.dumps(stored, indent=1, default=float) + "\n")
    rows = [stored[name] for name in makers]
    print("\nhard pairs\n" + lines([r for r in rows if r["kind"] == "hard"]))
    rest = [r for r in rows if r["kind"] != "hard"]
    if rest:
        print("\nrandom pairs that did not settle\n" + lines([r for r in rest if r["status"] != "SETTLED"]))
        print(f"\nrandom pairs by class (wanted: {WANTED:.0%} settled, nothing inverted or crossing)")
        print(table(rest))


if __name__ == "__main__":
    main()
