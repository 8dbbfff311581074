"""Volumes of real heads, read with the right place and sides; nibabel is the independent reader.

The MNI152 maps are those in nilearn's wheel (ICBM 2009a symmetric, Fonov et al. 2011, NeuroImage 54,
313-327); the subcortical volumes are the project's open ones (their NOTICE).
"""

from pathlib import Path

import nibabel as nib
import nilearn.datasets
import numpy as np
import pytest
from volmap_shared import __file__ as shared_file

from volmap.io.reading import Reading
from volmap.io.volumes import read_image, read_labels, read_volume_with_findings
from volmap.types import ImageVolume

MNI = Path(nilearn.datasets.__file__).parent / "data"
SUBCORTICAL = Path(shared_file).parent / "subcortical"
TISSUES = {tissue: MNI / f"mni_icbm152_{tissue}_tal_nlin_sym_09a_converted.nii.gz" for tissue in ("gm", "wm")}


def volume_and_centre(labels, label):
    index = np.argwhere(labels.labels == label).astype(float)
    return len(index) * labels.grid.voxel_mm3, labels.grid.to_world(index).mean(axis=0)


def by_nibabel(file, chosen):
    image = nib.load(file)
    index = np.argwhere(chosen(np.asarray(image.dataobj)))
    return (
        len(index) * abs(np.linalg.det(image.affine[:3, :3])),
        nib.affines.apply_affine(image.affine, index.mean(axis=0)),
    )


@pytest.mark.parametrize(("tissue", "share"), [("gm", 0.25), ("wm", 0.5)])
def test_tissue_maps_of_mni152_by_a_threshold(tissue, share):
    # The maps are stored as 0 to 255 with no slope; 255 is certainty, so a share is one of 255.
    file, least = TISSUES[tissue], share * 255
    read = read_labels(file, Reading(threshold=least))
    volume, centre = volume_and_centre(read, 1)
    true_volume, true_centre = by_nibabel(file, lambda values: values >= least)
    assert volume == pytest.approx(true_volume, rel=1e-6)
    assert np.allclose(centre, true_centre, atol=1e-4)
    assert np.allclose(read.grid.affine, nib.load(file).affine, atol=1e-5)


def test_mni152_is_symmetric_and_upright():
    # Published: the template is symmetric about x = 0; its cerebellum, the lowest of the white matter, lies
    # behind (MNI152 atlases put its centre near y = -60; from memory), the whole brain's centre near y = -20
    read = read_labels(TISSUES["wm"], Reading(threshold=127.5))
    places = read.grid.to_world(np.argwhere(read.labels).astype(float))
    assert read.grid.orientation == "RAS"
    mirrored = np.rint(read.grid.to_index(places * [-1, 1, 1])).astype(int)
    assert read.labels[tuple(mirrored.T)].mean() > 0.999
    lowest = places[places[:, 2] < -40]
    assert lowest[:, 1].mean() < -45 < places[:, 1].mean()


def test_the_template_is_an_image_and_its_grid_that_of_the_tissues():
    template = MNI / "mni_icbm152_t1_tal_nlin_sym_09a_converted.nii.gz"
    volume, _ = read_volume_with_findings(template, kind="image")
    assert isinstance(volume, ImageVolume)
    assert np.array_equal(volume.values, nib.load(template).get_fdata(dtype=np.float32))
    assert volume.grid.same_place(read_image(TISSUES["gm"]).grid)


SIDES = {"donor-10021": 3, "donor-12876": 3, "donor-15697": 3, "hippocampus-10021": 1}


@pytest.mark.parametrize("name", SIDES)
def test_left_structures_lie_left(name):
    # Law: left is where x < 0 in RAS+; the NOTICE says all of them are left-side structures.  Anatomy: the
    # pallidum lies medial of the putamen, the amygdala below both.
    file = SUBCORTICAL / f"{name}.nii.gz"
    read, centres = read_labels(file), []
    assert read.present == tuple(range(1, SIDES[name] + 1))
    for label in read.present:
        volume, centre = volume_and_centre(read, label)
        true_volume, true_centre = by_nibabel(file, lambda values, label=label: values == label)
        assert volume == pytest.approx(true_volume, rel=1e-6)
        assert np.allclose(centre, true_centre, atol=1e-4)
        centres.append(centre)
    assert all(centre[0] < 0 for centre in centres)
    if SIDES[name] == 3:
        putamen, pallidum, amygdala = centres
        assert abs(pallidum[0]) < abs(putamen[0])
        assert amygdala[2] < min(putamen[2], pallidum[2])


def test_a_turned_copy_keeps_its_sides(tmp_path):
    # Law: the same voxels stored right to left, back to front and upside down lie in the same places.
    image = nib.load(SUBCORTICAL / "donor-10021.nii.gz")
    ours = read_labels(SUBCORTICAL / "donor-10021.nii.gz")
    for axes in ("RAS", "LPS", "PIR", "LAI"):
        start = nib.orientations.io_orientation(image.affine)
        turn = nib.orientations.ornt_transform(start, nib.orientations.axcodes2ornt(axes))
        nib.save(image.as_reoriented(turn), tmp_path / f"{axes}.nii.gz")
        turned = read_labels(tmp_path / f"{axes}.nii.gz")
        assert turned.grid.orientation == axes
        for label in (1, 2, 3):
            centres = [volume_and_centre(labels, label)[1] for labels in (turned, ours)]
            assert np.allclose(*centres, atol=1e-4)
