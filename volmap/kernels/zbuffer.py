"""A software z-buffer: coloured triangles into an image, without any graphics library.

Screen coordinates: x to the right and y downward in pixels, depth away from the viewer in any one unit; the
centre of the pixel in row r and column c is at ``(c + 0.5, r + 0.5)``.  The projection is orthographic, so
that every quantity is linear on the screen (edge functions after Pineda, "A parallel algorithm for polygon
rasterization", SIGGRAPH 1988).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.compiled import inner_kernel, kernel

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Image = NDArray[np.float32]


@inner_kernel
def _owns_edge(dx: float, dy: float) -> bool:
    """Whether pixels exactly on this edge are the triangle's own: one of the two that share it says yes."""
    return dy < 0.0 or (dy == 0.0 and dx > 0.0)


@kernel
def _fill(screen: Floats, triangles: Ints, colours: Floats, rgba: Floats, depth: Floats, face: Ints) -> None:
    """Draw every triangle into `rgba`, `depth` and `face`, nearest first to be kept."""
    height, width = depth.shape
    for t in range(len(triangles)):
        a, b, c = triangles[t]
        ax, ay, az = screen[a]
        bx, by, bz = screen[b]
        cx, cy, cz = screen[c]
        area = (bx - ax) * (cy - ay) - (by - ay) * (cx - ax)
        if area == 0.0:
            continue
        turn = 1.0 if area > 0.0 else -1.0
        own_a = _owns_edge(turn * (cx - bx), turn * (cy - by))
        own_b = _owns_edge(turn * (ax - cx), turn * (ay - cy))
        own_c = _owns_edge(turn * (bx - ax), turn * (by - ay))
        first_row = max(0, int(np.ceil(min(ay, by, cy) - 0.5)))
        last_row = min(height - 1, int(np.floor(max(ay, by, cy) - 0.5)))
        first_column = max(0, int(np.ceil(min(ax, bx, cx) - 0.5)))
        last_column = min(width - 1, int(np.floor(max(ax, bx, cx) - 0.5)))
        for row in range(first_row, last_row + 1):
            y = row + 0.5
            for column in range(first_column, last_column + 1):
                x = column + 0.5
                wa = ((cx - bx) * (y - by) - (cy - by) * (x - bx)) * turn
                wb = ((ax - cx) * (y - cy) - (ay - cy) * (x - cx)) * turn
                wc = ((bx - ax) * (y - ay) - (by - ay) * (x - ax)) * turn
                if wa < 0.0 or wb < 0.0 or wc < 0.0:
                    continue
                if (wa == 0.0 and not own_a) or (wb == 0.0 and not own_b) or (wc == 0.0 and not own_c):
                    continue
                total = wa + wb + wc
                wa, wb, wc = wa / total, wb / total, wc / total
                z = wa * az + wb * bz + wc * cz
                if z < depth[row, column]:
                    depth[row, column] = z
                    face[row, column] = t
                    for k in range(4):
                        rgba[row, column, k] = (
                            wa * colours[t, 0, k] + wb * colours[t, 1, k] + wc * colours[t, 2, k]
                        )


def draw_triangles(
    screen: Floats,
    triangles: Ints,
    colours: Floats,
    *,
    height: int,
    width: int,
    ground: tuple[float, float, float, float] = (0.0, 0.0, 0.0, 0.0),
) -> tuple[Image, Floats, Ints]:
    """Draw triangles, the nearest one winning in every pixel.

    Parameters
    ----------
    screen : (n, 3) float64
        x and y in pixels, and depth.
    triangles : (m, 3) int64
    colours : (m, 3, 4) float64
        Red, green, blue and opacity (0 to 1) at each corner of each triangle; equal corners make it flat.
    height, width : int
        Of the image, pixels.
    ground : tuple of 4 float
        Colour and opacity where nothing is drawn.

    Returns
    -------
    rgba : (height, width, 4) float32
        Colours not multiplied by opacity.
    depth : (height, width) float64
        Infinite where nothing was drawn.
    face : (height, width) int64
        Triangle seen in each pixel, -1 where none; of equally near ones the first.
    """
    rgba: Image = np.empty((height, width, 4), np.float32)
    rgba[:] = ground
    depth = np.full((height, width), np.inf)
    face = np.full((height, width), -1, np.int64)
    _fill(
        np.array(screen, np.float64, order="C"),
        np.array(triangles, np.int64, order="C"),
        np.array(colours, np.float64, order="C"),
        rgba,
        depth,
        face,
    )
    return rgba, depth, face


def lay_over(front: Image, back: Image, where: NDArray[np.bool_]) -> None:
    """Lay (h, w, 4) `front` over opaque (h, w, 4) `back`, in place, at the pixels `where`."""
    veil = front[where]
    opacity = veil[:, 3:]
    back[where, :3] = veil[:, :3] * opacity + back[where, :3] * (1.0 - opacity)


def shrink(image: Image, factor: int) -> Image:
    """(h / factor, w / factor, c) means over blocks of pixels: the supersampled image made smooth."""
    rows, columns = image.shape[0] // factor * factor, image.shape[1] // factor * factor
    parts = [image[r:rows:factor, c:columns:factor] for r in range(factor) for c in range(factor)]
    return np.asarray(sum(parts[1:], parts[0]) / np.float32(factor * factor))


@kernel
def _mark_rims(group: Ints, depth: Floats, jump: float, marked: NDArray[np.bool_]) -> None:
    height, width = depth.shape
    for row in range(height):
        for column in range(width):
            for step in range(2):
                r, c = row + step, column + 1 - step
                if r >= height or c >= width:
                    continue
                here, there = depth[row, column], depth[r, c]
                near_here, near_there = here <= there, there <= here
                if here == np.inf and there == np.inf:
                    continue
                if abs(here - there) > jump:
                    marked[row, column] |= near_here
                    marked[r, c] |= near_there
                elif group[row, column] != group[r, c]:
                    marked[row, column] = True
                    marked[r, c] = True


def rims(group: Ints, depth: Floats, jump: float) -> NDArray[np.bool_]:
    """(h, w) True where a line belongs: the group changes, or the depth does by more than `jump`.

    A silhouette is marked on its nearer side, one pixel wide; a border between groups on both sides.
    """
    marked = np.zeros(group.shape, np.bool_)
    _mark_rims(
        np.array(group, np.int64, order="C"), np.array(depth, np.float64, order="C"), float(jump), marked
    )
    return marked
