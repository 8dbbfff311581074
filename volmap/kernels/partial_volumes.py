"""How much of each label every voxel of another grid receives: exact partial volumes.

A piecewise affine map sends each source voxel, a box, to pieces of parallelepipeds.  The part of a target
voxel (a box) that comes from one label is a sum of volumes of convex bodies: target voxel, tet and source
voxel, cut with each other.  They are cut here with planes, piece by piece: the target voxel is five tets, and
what a plane leaves of a tet is one tet or three.  No sampling; only rounding is lost.

Most voxels need no cutting: those that lie inside the mesh and meet source voxels of one label only.
`_visit` finds the rest first, then cuts them, plane after plane of the grid, so that threads never meet.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.barycentric import INSIDE, barycentric_rows, plain
from volmap.kernels.compiled import inner_kernel, kernel
from volmap.kernels.rasterise import corner_range, tets_by_plane
from volmap.kernels.threads import on_threads
from volmap.kernels.topology import match_faces

# A unit cube about the origin as five tets: one in the middle, four at corners.
_CUBE = np.array(
    [
        [[-1, -1, -1], [1, 1, -1], [1, -1, 1], [-1, 1, 1]],
        [[1, -1, -1], [-1, -1, -1], [1, 1, -1], [1, -1, 1]],
        [[-1, 1, -1], [-1, -1, -1], [1, 1, -1], [-1, 1, 1]],
        [[-1, -1, 1], [-1, -1, -1], [1, -1, 1], [-1, 1, 1]],
        [[1, 1, 1], [1, 1, -1], [1, -1, 1], [-1, 1, 1]],
    ]
) * np.float64(0.5)

# What a plane leaves of a tet whose corners are sorted, kept ones first: each new corner lies on the edge
# between two old ones.  Rows: one, two, three kept.  A prism (lower triangle, upper triangle) is three tets.
_ENDS = np.array(
    [
        [[0, 0], [0, 1], [0, 2], [0, 3], [0, 0], [0, 0]],
        [[0, 0], [0, 2], [0, 3], [1, 1], [1, 2], [1, 3]],
        [[0, 0], [1, 1], [2, 2], [0, 3], [1, 3], [2, 3]],
    ]
)
_PRISM = np.array([[0, 1, 2, 5], [0, 1, 4, 5], [0, 3, 4, 5]])

# Five tets cut by four planes are at most 5 * 3^4 pieces.  Each cut after that leaves at most five more
# pieces waiting, and halves a range of at most 2^15 voxels along one of three axes.
_ROOM = 512

# A piece that reaches less than this across a plane between two voxels, in voxels, lies on one side.
_TOUCHING = 1e-11

# A voxel and a tet that share less than this, as a barycentric coordinate, share nothing.
_NOTHING = 1e-13

# Ranges of no more than one voxel and this many are cut where that leaves fewest pieces.
_FEW = 3

_UNSEEN, _MIXED = -2, -1  # states of a voxel; from 0 on: the one label seen in it so far
_AT_HULL, _CENTRE_INSIDE = 1, 2  # bits of a voxel's place in the mesh
_SLAB = 16
_TETS = 16384  # cut at a time by `tets_in_labels`


class PartialVolumes(NamedTuple):
    """Some planes of the target grid.

    Attributes
    ----------
    slab : slice
        Along i.
    whole : (slab, J, K) uint16
        The label that fills a voxel alone; 0 elsewhere.
    voxel : (n,) int64
        Places in the slab (flat, last index fastest), ascending; more than once where labels meet.
    label : (n,) int64
        Ascending in a voxel, above 0.
    share : (n,) float64
        Volume of the label in the voxel over the voxel's, above 0.
    """

    slab: slice
    whole: NDArray[np.uint16]
    voxel: NDArray[np.int64]
    label: NDArray[np.int64]
    share: NDArray[np.float64]


def partial_volumes(
    points: NDArray[np.float64],
    tets: NDArray[np.int64],
    shape: tuple[int, int, int],
    *,
    origins: NDArray[np.float64],
    labels: NDArray[np.uint16],
) -> Iterator[PartialVolumes]:
    """Exact share of every label in every voxel of a grid, some planes at a time.

    Parameters
    ----------
    points : (n, 3) float64
        Mesh points as continuous indices of the target grid, whose voxel v is the box v - 1/2 to v + 1/2.
    tets : (m, 4) int64
    shape : tuple of 3 int
        Of the target grid.
    origins : (n, 3) float64
        The same mesh points as continuous indices of `labels`.
    labels : (I, J, K) uint16
        Boxes likewise; everything beyond them is 0.

    Yields
    ------
    PartialVolumes
    """
    points, tets, origins = plain(points, np.float64), plain(tets, np.int64), plain(origins, np.float64)
    present, codes = _coded(labels)
    low = np.maximum(np.floor(corner_range(points, tets, np.minimum) + 0.5), 0).astype(np.int32)
    high = np.ceil(corner_range(points, tets, np.maximum) - 0.5)
    high = np.minimum(high, np.array(shape) - 1).astype(np.int32)
    at_hull = np.zeros((len(tets), 4), np.bool_)
    at_hull.ravel()[match_faces(tets)[2]] = True
    tables = (barycentric_rows(points, tets), low, high, *tets_by_plane(low, high, np.int64(shape[0])))
    mesh = (*tables, at_hull, tets, origins, codes)
    for first in range(0, shape[0], _SLAB):
        slab = slice(first, min(first + _SLAB, shape[0]))
        yield _slab_of(mesh, slab, shape, present)


def tets_in_labels(
    points: NDArray[np.float64], tets: NDArray[np.int64], labels: NDArray[np.uint16]
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """Exact volume of each tet inside the voxels of each label.

    Parameters
    ----------
    points : (n, 3) float64
        Mesh points as continuous indices of `labels`.
    tets : (m, 4) int64
    labels : (I, J, K) uint16
        Boxes about their centres; everything beyond them is 0.

    Returns
    -------
    tet, label : (k,) int64
        Labels above 0 that share something with a tet; tets ascending, labels ascending in a tet.
    volume : (k,) float64
        In voxels.
    """
    points, tets = plain(points, np.float64), plain(tets, np.int64)
    present, codes = _coded(labels)
    found = []
    for first in range(0, len(tets), _TETS):
        part = np.ascontiguousarray(tets[first : first + _TETS])
        shares = np.zeros((len(part), len(present)))
        on_threads(_cut_tets, len(part), points, part, codes, shares)
        row, column = np.nonzero(shares[:, 1:])
        found.append((row + first, present[column + 1], shares[row, column + 1]))
    tet, label, volume = (np.concatenate(parts) for parts in zip(*found, strict=True))
    return tet, label, volume


def _coded(labels: NDArray[np.uint16]) -> tuple[NDArray[np.int64], NDArray[np.uint16]]:
    """The labels that occur, 0 always among them, and the volume with their places in that list."""
    present = np.union1d(np.flatnonzero(np.bincount(labels.ravel(), minlength=1)), [0])
    code = np.zeros(int(present[-1]) + 1, np.uint16)
    code[present] = np.arange(len(present))
    return present, np.ascontiguousarray(code[labels])


def _slab_of(
    mesh: tuple[NDArray[np.generic], ...],
    slab: slice,
    shape: tuple[int, int, int],
    present: NDArray[np.int64],
) -> PartialVolumes:
    """Find the voxels that must be cut, cut them, and sort what came out."""
    room = (slab.stop - slab.start, *shape[1:])
    state, place = np.full(room, _UNSEEN, np.int32), np.zeros(room, np.uint8)
    begin, nothing = np.int64(slab.start), np.empty((0, 0))
    on_threads(_visit, room[0], *mesh, begin, state, place, nothing)
    cut = (state == _MIXED) | ((state > 0) & (place & _AT_HULL > 0))
    alone = (state > 0) & (place == _CENTRE_INSIDE)
    whole = np.where(alone, present[np.maximum(state, 0)], 0).astype(np.uint16)
    voxel = np.flatnonzero(cut)
    state.fill(_UNSEEN)
    state.ravel()[voxel] = np.arange(len(voxel))
    shares = np.zeros((len(voxel), len(present)))
    if len(voxel):
        on_threads(_visit, room[0], *mesh, begin, state, place, shares)
    row, column = np.nonzero(shares[:, 1:])
    return PartialVolumes(slab, whole, voxel[row], present[column + 1], shares[row, column + 1])


@kernel
def _visit(  # type: ignore[no-untyped-def]
    first, last, rows, low, high, start, members, at_hull, tets, origins, codes, begin, state, place, shares
):
    """Find what must be cut (`shares` empty), or cut it: then `state` holds the rows of `shares`.

    Plane 0 of `state` and `place` is `begin`.
    """
    cutting = shares.shape[0] > 0
    gradient, half, at, away = np.empty((4, 3)), np.empty(4), np.empty(4), np.empty(3)
    back, box, centre = np.empty((3, 3)), np.empty((3, 3)), np.empty(3)
    ends, order, height, piece = (
        np.empty((2, 3), np.int64),
        np.empty(4, np.int64),
        np.empty(4),
        np.empty((4, 3)),
    )
    stack, spare, corners = np.empty((_ROOM, 4, 3)), np.empty((_ROOM, 4, 3)), np.empty((6, 3))
    for p in range(first, last):
        for m in range(start[begin + p], start[begin + p + 1]):
            t = members[m]
            if np.isnan(rows[t, 0, 0]):
                continue  # no volume
            per_volume = _open_up(rows, tets, origins, t, gradient, half, back, box)
            away[0] = begin + p - rows[t, 3, 0]
            for j in range(low[t, 1], high[t, 1] + 1):
                away[1] = j - rows[t, 3, 1]
                for k in range(low[t, 2], high[t, 2] + 1):
                    away[2] = k - rows[t, 3, 2]
                    now = state[p, j, k]
                    if (now < 0 and cutting) or now == _MIXED:
                        continue
                    where = _where(gradient, half, away, at_hull, t, at)
                    if where < 0:
                        continue
                    for d in range(3):
                        centre[d] = origins[tets[t, 0], d]
                        for e in range(3):
                            centre[d] += back[d, e] * away[e]
                    if cutting:
                        n = _in_tet(gradient, half, at, height, order, corners, stack, spare)
                        for q in range(n):
                            _to_origin(stack[q], centre, back, spare[0])
                            _share_out(
                                codes, height, order, corners, ends, piece, spare, per_volume, shares[now]
                            )
                        continue
                    place[p, j, k] |= where
                    for d in range(3):
                        ends[0, d] = np.floor(max(centre[d] - box[0, d], box[1, d]) + 0.5)
                        ends[1, d] = np.ceil(min(centre[d] + box[0, d], box[2, d]) - 0.5)
                    found = _only(codes, ends)
                    state[p, j, k] = found if now == _UNSEEN or found == now else _MIXED


@kernel
def _cut_tets(first, last, points, tets, codes, shares):  # type: ignore[no-untyped-def]
    """Volume of each tet in the voxels of each code."""
    ends, order, height, piece = (
        np.empty((2, 3), np.int64),
        np.empty(4, np.int64),
        np.empty(4),
        np.empty((4, 3)),
    )
    stack, corners = np.empty((_ROOM, 4, 3)), np.empty((6, 3))
    for t in range(first, last):
        for v in range(4):
            for d in range(3):
                stack[0, v, d] = points[tets[t, v], d]
        _share_out(codes, height, order, corners, ends, piece, stack, 1.0 / 6.0, shares[t])


@inner_kernel
def _open_up(rows, tets, origins, t, gradient, half, back, box):  # type: ignore[no-untyped-def]
    """What is the same for all voxels of a tet; returns the volume in target voxels of a sixth source voxel.

    Fills the gradients of the four barycentric coordinates; ``half``, by how much each differs at most in a
    voxel from its value at the centre; ``back``, which leads from target to source indices; and ``box``: how
    far a voxel reaches from its centre's preimage, and the least and largest index in the tet.
    """
    for r in range(4):
        half[r] = 0.0
        for d in range(3):
            gradient[r, d] = rows[t, r - 1, d] if r else -rows[t, 0, d] - rows[t, 1, d] - rows[t, 2, d]
            half[r] += 0.5 * abs(gradient[r, d])
    for d in range(3):
        box[0, d], box[1, d], box[2, d] = 0.0, origins[tets[t, 0], d], origins[tets[t, 0], d]
        for r in range(1, 4):
            box[1, d] = min(box[1, d], origins[tets[t, r], d])
            box[2, d] = max(box[2, d], origins[tets[t, r], d])
        for e in range(3):
            back[d, e] = 0.0
            for r in range(1, 4):
                back[d, e] += (origins[tets[t, r], d] - origins[tets[t, 0], d]) * gradient[r, e]
            box[0, d] += 0.5 * abs(back[d, e])
    determinant = 0.0
    for d in range(3):
        e, f = (d + 1) % 3, (d + 2) % 3
        determinant += back[0, d] * (back[1, e] * back[2, f] - back[1, f] * back[2, e])
    return 1.0 / (6.0 * abs(determinant))


@inner_kernel
def _where(gradient, half, away, at_hull, t, at):  # type: ignore[no-untyped-def]
    """Fill in the barycentric coordinates of a voxel's centre; bits of its place, -1 when it is apart."""
    where = _CENTRE_INSIDE
    for r in range(4):
        at[r] = 0.0 if r else 1.0
        for d in range(3):
            at[r] += gradient[r, d] * away[d]
        if at[r] + half[r] < _NOTHING:
            return -1
        if at[r] < INSIDE:
            where &= _AT_HULL
        if at_hull[t, r] and at[r] - half[r] < -INSIDE:
            where |= _AT_HULL
    return where


@inner_kernel
def _in_tet(gradient, half, at, height, order, corners, stack, spare):  # type: ignore[no-untyped-def]
    """Cut a voxel with a tet: pieces on `stack`, from the voxel's centre; returns their number."""
    n = 5
    for q in range(n):
        for v in range(4):
            for d in range(3):
                stack[q, v, d] = _CUBE[q, v, d]
    for r in range(4):
        if at[r] - half[r] >= 0.0:
            continue
        left = 0
        for q in range(n):
            for v in range(4):
                height[v] = at[r]
                for d in range(3):
                    height[v] += gradient[r, d] * stack[q, v, d]
            left = _keep(stack[q], height, order, corners, spare, left)
        n = left
        for q in range(n):
            for v in range(4):
                for d in range(3):
                    stack[q, v, d] = spare[q, v, d]
    return n


@inner_kernel
def _to_origin(piece, centre, back, moved):  # type: ignore[no-untyped-def]
    """A piece of a target voxel in source indices."""
    for v in range(4):
        for d in range(3):
            moved[v, d] = centre[d]
            for e in range(3):
                moved[v, d] += back[d, e] * piece[v, e]


@inner_kernel
def _share_out(codes, height, order, corners, ends, piece, stack, per_volume, shares):  # type: ignore[no-untyped-def]
    """Cut the piece on `stack` between source voxels until each part lies in voxels of one label; add up."""
    waiting = 1
    while waiting > 0:
        waiting -= 1
        for v in range(4):
            for d in range(3):
                piece[v, d] = stack[waiting, v, d]
        _range(piece, ends)
        found = _only(codes, ends)
        if found >= 0:
            shares[found] += _six_volumes(piece) * per_volume
            continue
        axis, plane = _cut_between(codes, ends)
        for side in range(2):
            for v in range(4):
                height[v] = piece[v, axis] - plane if side else plane - piece[v, axis]
            waiting = _keep(piece, height, order, corners, stack, waiting)


@inner_kernel
def _only(codes, ends):  # type: ignore[no-untyped-def]
    """The one code of all voxels in a range, 0 beyond the volume; `_MIXED` where there are two."""
    found = np.int64(_UNSEEN)
    for d in range(3):
        if ends[0, d] < 0 or ends[1, d] >= codes.shape[d]:
            found = np.int64(0)
    for i in range(max(ends[0, 0], 0), min(ends[1, 0] + 1, codes.shape[0])):
        for j in range(max(ends[0, 1], 0), min(ends[1, 1] + 1, codes.shape[1])):
            for k in range(max(ends[0, 2], 0), min(ends[1, 2] + 1, codes.shape[2])):
                code = np.int64(codes[i, j, k])
                if found == _UNSEEN:
                    found = code
                elif found != code:
                    return np.int64(_MIXED)
    return found


@inner_kernel
def _cut_between(codes, ends):  # type: ignore[no-untyped-def]
    """Axis and place of the plane that leaves most voxels of a range on sides of one label, else the middle.

    Long ranges are halved without trying all planes.
    """
    axis, most = 0, 0
    for d in range(3):
        if ends[1, d] - ends[0, d] > ends[1, axis] - ends[0, axis]:
            axis = d
    plane = (ends[0, axis] + ends[1, axis]) // 2
    if ends[1, axis] - ends[0, axis] > _FEW:
        return axis, plane + 0.5
    for d in range(3):
        bottom, top = ends[0, d], ends[1, d]
        for p in range(bottom, top):
            ends[1, d] = p
            alike = p + 1 - bottom if _only(codes, ends) >= 0 else 0
            ends[0, d], ends[1, d] = p + 1, top
            alike += top - p if _only(codes, ends) >= 0 else 0
            ends[0, d] = bottom
            share = alike * 1000 // (top + 1 - bottom)  # of the voxels of the range
            if share > most:
                axis, plane, most = d, p, share
    return axis, plane + 0.5


@inner_kernel
def _range(piece, ends):  # type: ignore[no-untyped-def]
    """First and last voxel that a piece meets along each axis."""
    for d in range(3):
        least = most = piece[0, d]
        for v in range(1, 4):
            least, most = min(least, piece[v, d]), max(most, piece[v, d])
        ends[0, d] = np.floor(least + 0.5 + _TOUCHING)
        ends[1, d] = max(ends[0, d], np.int64(np.ceil(most - 0.5 - _TOUCHING)))


@inner_kernel
def _six_volumes(piece):  # type: ignore[no-untyped-def]
    """Six times the volume of a tet."""
    total = 0.0
    for d in range(3):
        e, f = (d + 1) % 3, (d + 2) % 3
        cross = (piece[2, e] - piece[0, e]) * (piece[3, f] - piece[0, f])
        cross -= (piece[2, f] - piece[0, f]) * (piece[3, e] - piece[0, e])
        total += (piece[1, d] - piece[0, d]) * cross
    return abs(total)


@inner_kernel
def _keep(piece, height, order, corners, stack, n):  # type: ignore[no-untyped-def]
    """Put on a stack of n tets what of a tet lies where its corners' heights say above 0; returns its size.

    What is thinner than `_NOTHING` is left out: it is rounding, of planes that pass through corners.
    """
    kept, others, highest = 0, 3, 0.0
    for v in range(4):
        if height[v] > 0.0:
            order[kept] = v
            kept += 1
            highest = max(highest, height[v])
        else:
            order[others] = v
            others -= 1
    if highest < _NOTHING:
        return n
    if kept == 4:
        for v in range(4):
            for d in range(3):
                stack[n, v, d] = piece[v, d]
        return n + 1
    for c in range(4 if kept == 1 else 6):
        u, v = order[_ENDS[kept - 1, c, 0]], order[_ENDS[kept - 1, c, 1]]
        share = 0.0 if u == v else height[u] / (height[u] - height[v])
        for d in range(3):
            corners[c, d] = piece[u, d] + share * (piece[v, d] - piece[u, d])
    for q in range(1 if kept == 1 else 3):
        for v in range(4):
            c = v if kept == 1 else _PRISM[q, v]
            for d in range(3):
                stack[n, v, d] = corners[c, d]
        n += 1
    return n
