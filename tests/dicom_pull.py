"""A Deformable Spatial Registration applied to points, by the text of PS3.3 C.20.3 alone."""

import numpy as np
import pydicom
from scipy.interpolate import RegularGridInterpolator


def pulled(path, points_lps):
    """Where registered points come from, by PS3.3 C.20.3 alone: plain pydicom, numpy and SciPy; LPS."""
    item = pydicom.dcmread(path).DeformableRegistrationSequence[0]
    matrices = [
        np.array(part[0].FrameOfReferenceTransformationMatrix, float).reshape(4, 4)
        for part in (
            item.PreDeformationMatrixRegistrationSequence,
            item.PostDeformationMatrixRegistrationSequence,
        )
    ]
    grid = item.DeformableRegistrationGridSequence[0]
    x, y = np.array(grid.ImageOrientationPatient, float).reshape(2, 3)
    steps = np.stack([x, y, np.cross(x, y)], axis=1) * np.array(grid.GridResolution)
    nx, ny, nz = grid.GridDimensions
    vectors = np.frombuffer(grid.VectorGridData, "<f4").reshape(nz, ny, nx, 3)
    before = points_lps @ matrices[0][:3, :3].T + matrices[0][:3, 3]
    index = np.linalg.solve(steps, (before - np.array(grid.ImagePositionPatient, float)).T).T
    axes = [np.arange(n) for n in (nz, ny, nx)]
    moved = before + RegularGridInterpolator(axes, vectors.astype(float))(index[:, ::-1])
    return moved @ matrices[1][:3, :3].T + matrices[1][:3, 3]
