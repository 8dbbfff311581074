"""Three open label volumes, stored L-I-P, with the voxel counts published with them."""

from importlib.resources import files

import nibabel
import numpy as np
import pytest
from test_mesh_shapes import require_sound

from volmap.mesh import mesh
from volmap.types import Grid, LabelVolume

PUBLISHED_MM3 = {10021: (5935, 1337, 1489), 12876: (7673, 1210, 2189), 15697: (5963, 1291, 2243)}


@pytest.mark.parametrize("donor", sorted(PUBLISHED_MM3))
def test_default_mesh_of_a_subcortical_volume(donor):
    image = nibabel.load(str(files("volmap_shared") / "subcortical" / f"donor-{donor}.nii.gz"))
    labels = np.asarray(image.dataobj).astype(np.uint16)
    result = mesh(LabelVolume(Grid(image.shape, image.affine), labels))
    require_sound(result)
    assert 34_000 < result.quality.tets < 46_000
    for label, voxels in enumerate(PUBLISHED_MM3[donor], start=1):
        assert abs(result.mesh.volume_of(label) / voxels - 1) < 0.005
    box = [result.mesh.points.min(axis=0), result.mesh.points.max(axis=0)]
    filled = Grid(image.shape, image.affine).to_world(np.argwhere(labels > 0).astype(float))
    assert np.allclose(box, [filled.min(axis=0), filled.max(axis=0)], atol=1.0)
