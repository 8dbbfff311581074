"""Tets held by the boundary alone get an inner point; boundary and volume stay."""

import numpy as np
from label_shapes import faces_of

from volmap.kernels.lattice import bcc
from volmap.kernels.tets import signed_volumes
from volmap.mesh.labelled import Complex
from volmap.mesh.pinned import freed, pinned_tets


def slab():
    """A lattice one cell thick, in two labels: full of pinned tets."""
    points, tets = bcc(np.zeros(3), np.array([4.0, 4.0, 1.0]), 1.0)
    return Complex(points, tets, np.where(points[tets].mean(axis=1)[:, 0] < 2.6, 1, 2))


def hull(tets):
    faces, counts = np.unique(faces_of(tets), axis=0, return_counts=True)
    assert counts.max() == 2
    return {tuple(f) for f in faces[counts == 1].tolist()}


def test_slow_twin_of_pinned_tets():
    before = slab()
    sides = {}
    for tet, label in zip(before.tets, before.labels, strict=True):
        for face in faces_of(tet[None]).tolist():
            sides.setdefault(tuple(face), []).append(int(label))
    held = {v for face, who in sides.items() if len(who) == 1 or who[0] != who[1] for v in face}
    wanted = [all(int(v) in held for v in tet) for tet in before.tets]
    assert pinned_tets(before).tolist() == wanted
    assert sum(wanted) > 100


def test_no_tet_stays_pinned_and_nothing_else_changes():
    before = slab()
    after = freed(before)
    assert not pinned_tets(after).any()
    volumes = signed_volumes(after.points, after.tets)
    assert volumes.min() > 0
    for label in (1, 2):
        old, new = before.tets[before.labels == label], after.tets[after.labels == label]
        assert hull(new) == hull(old)
        assert np.isclose(volumes[after.labels == label].sum(), signed_volumes(before.points, old).sum())


def test_a_lone_tet_is_split_in_four():
    points = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1]])
    after = freed(Complex(points, np.array([[0, 1, 2, 3]]), np.array([5])))
    assert len(after.tets) == 4
    assert (after.labels == 5).all()
    assert np.allclose(signed_volumes(after.points, after.tets), 1 / 24)
