"""Energies against each other where the inside is known: ``python tests/bench/energies.py``."""

from __future__ import annotations

import numpy as np
import volmap_phantoms

from volmap.carry import move_points
from volmap.kernels.energies import ENERGIES
from volmap.mapping import MapSettings, map_mesh
from volmap.mesh import mesh


def main() -> None:
    """Bead error of gel-column 0 -> 3 and volume-ratio error of pressure-shell 0 -> 2, every energy."""
    cases = []
    for name, visit in (("gel-column", 3), ("pressure-shell", 2)):
        phantom = volmap_phantoms.make(name)
        here, there = phantom.visits[0], phantom.visits[visit]
        cases.append((phantom, here, there, mesh(here.labels).mesh, mesh(there.labels).mesh))
    print("energy                bead mean  p95   max mm | J 0.1-99.9 %   | shell: J error at points | steps")
    for energy in ENERGIES:
        solved = [
            map_mesh(a, b.interfaces, MapSettings(energy=energy), voxel_mm=here.labels.grid.voxel_mm).outcome
            for _, here, _, a, b in cases
        ]
        _, here, there, _, _ = cases[0]
        landed = move_points(solved[0].map, here.beads.points, reach_mm=1.0).points
        error = np.linalg.norm(landed - there.beads.points, axis=1)
        low, high = np.percentile(solved[0].map.volume_ratio, [0.1, 99.9])
        shell = np.abs(solved[1].map.volume_ratio_at_points - 1).mean()
        print(
            f"{energy:20s}  {error.mean():8.2f} {np.percentile(error, 95):6.2f} {error.max():5.2f}    | "
            f"{low:.2f}-{high:.2f}      | {100 * shell:.2f} %                   | "
            f"{len(solved[0].history)}, {len(solved[1].history)}",
            flush=True,
        )


if __name__ == "__main__":
    main()
