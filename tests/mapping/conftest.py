"""Meshes of phantoms, coarse and made once."""

import pytest
import volmap_phantoms

from volmap.mesh import MeshSettings, mesh


@pytest.fixture(scope="session")
def shell_phantom():
    """A thick incompressible sphere inflated by pressure."""
    return volmap_phantoms.make("pressure-shell", voxel_mm=2.0)


@pytest.fixture(scope="session")
def shell(shell_phantom):
    """Its mesh before, and its surface after the first inflation."""
    first, second = (
        mesh(visit.labels, MeshSettings(wanted_tets=5000)).mesh for visit in shell_phantom.visits[:2]
    )
    return first, second.interfaces
