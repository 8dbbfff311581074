"""Which pictures a report has."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from volmap.kernels.planecuts import cut_tets
from volmap.report import bodies, charts, cuts, scales
from volmap.report.inputs import ReportInput
from volmap.report.pictures import Panel, Picture, drawable, finish, panel_shape, plate
from volmap.report.through import Passage
from volmap.report.views import BELOW, FRONT, LEFT, STRAIGHT, View, tilted
from volmap.types import ImageVolume, LabelVolume, Surface

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

MOST_LABELS = 8
"""Labels that get pictures of their own; the largest ones, when there are more."""

_ROOM = 0.84
_OBLIQUE = tilted(FRONT, 32.0, 18.0)


@dataclass(frozen=True, eq=False)
class Scene:
    """What every picture of one map shares.

    Parameters
    ----------
    inputs : ReportInput
    """

    inputs: ReportInput

    @cached_property
    def tets(self) -> Ints:
        """(m, 4) int64."""
        return np.array(self.inputs.map.mesh.tets)

    @cached_property
    def labels(self) -> Ints:
        """(m,) int64."""
        return np.array(self.inputs.map.mesh.labels)

    @cached_property
    def places(self) -> tuple[Floats, Floats]:
        """Points of the mesh in the source, and in the target."""
        return np.array(self.inputs.map.mesh.points), np.array(self.inputs.map.images)

    @cached_property
    def limit(self) -> float:
        """End of the colour scale, log2 J."""
        return scales.scale_limit(self.inputs.map.volume_ratio, self.inputs.map.mesh.volumes)

    @cached_property
    def tet_colours(self) -> Floats:
        """(m, 3) colours of the volume ratio."""
        return scales.colours_of_ratio(self.inputs.map.volume_ratio, self.limit)

    @property
    def inverted(self) -> bool:
        """Whether some tet's J is not positive."""
        return not bool((self.inputs.map.volume_ratio > 0).all())

    @cached_property
    def shown(self) -> tuple[int, ...]:
        """Labels with pictures of their own, ascending."""
        by_volume = sorted(self.inputs.labels, key=lambda v: -abs(self.inputs.map.mesh.volume_of(v)))
        return tuple(sorted(by_volume[:MOST_LABELS]))

    @cached_property
    def middle(self) -> tuple[Floats, Floats]:
        """One material point near the middle of the source, in both worlds."""
        source, target = (p[self.tets].mean(axis=1) for p in self.places)
        weight = np.abs(self.inputs.map.mesh.volumes)
        centre = (source * weight[:, None]).sum(axis=0) / max(weight.sum(), 1e-300)
        nearest = int(np.argmin(((source - centre) ** 2).sum(axis=1)))
        return source[nearest], target[nearest]

    @cached_property
    def centres(self) -> tuple[Floats, Floats]:
        """Middles of the boxes around the two bodies."""
        a, b = self.places
        return 0.5 * (a.min(axis=0) + a.max(axis=0)), 0.5 * (b.min(axis=0) + b.max(axis=0))

    def mm_per_px(self, view_set: tuple[View, ...], shape: tuple[int, int]) -> float:
        """One scale at which both bodies fit every view."""
        need = 1e-9
        for view in view_set:
            for points, centre in zip(self.places, self.centres, strict=True):
                flat = np.abs((points - centre) @ view.axes.T).max(axis=0)
                need = max(need, 2 * flat[0] / (_ROOM * shape[1]), 2 * flat[1] / (_ROOM * shape[0]))
        return float(need)

    def tall(self, view_set: tuple[View, ...]) -> float:
        """Height over width of panels that suits both bodies, within reason."""
        sizes = [np.ptp(points @ view.axes.T, axis=0)[:2] for view in view_set for points in self.places]
        wide, high = max(s[0] for s in sizes), max(s[1] for s in sizes)
        return float(np.clip(high / max(wide, 1e-9), 0.72, 1.12))

    def name(self, label: int) -> str:
        """Name of a label for a picture."""
        return drawable(self.inputs.source.name_of(label), f"label {label}")


def _heading(side: int) -> str:
    return ("A · source", "B · target")[side]


def outsides(scene: Scene) -> Picture:
    """Both bodies from three sides, coloured by volume ratio."""
    faces = bodies.hull_faces(scene.tets)
    height, width = panel_shape(3, scene.tall(STRAIGHT))
    scale = scene.mm_per_px(STRAIGHT, (height, width))
    rows = []
    for side, points in enumerate(scene.places):
        sheet = bodies.Sheet(points, faces.triangles, scene.tet_colours[faces.tet], scene.labels[faces.tet])
        rows.append(
            [
                Panel(
                    bodies.paint(
                        [sheet], view, scene.centres[side], mm_per_px=scale, height=height, width=width
                    ),
                    f"{_heading(side)}, {view.words}",
                    view,
                    scale,
                )
                for view in STRAIGHT
            ]
        )
    figure = plate(rows, foot_in=charts.BAR_IN)
    charts.colour_bar(figure, scene.limit, inverted=scene.inverted)
    return finish(
        figure,
        alt="Source and target bodies seen from the front, the left and below, each part coloured by "
        "the volume ratio at the surface: blue where it shrank, orange where it grew.",
        caption="Both bodies, same directions and scale, coloured by volume ratio at the surface. The "
        "body's left is on the right of the picture wherever left and right show. Dark lines: "
        "silhouettes and borders of labels.",
    )


def _cut_view(scene: Scene) -> View:
    """The straight view in which a cut through the middle is largest."""
    areas = []
    for view in STRAIGHT:
        values = (scene.places[0] - scene.middle[0]) @ view.toward
        cut = cut_tets(values, scene.tets)
        a, b, c = (cut.at(scene.places[0])[cut.cells[:, k]] for k in range(3))
        areas.append(float(np.linalg.norm(np.cross(b - a, c - a), axis=1).sum()))
    return STRAIGHT[int(np.argmax(areas))]


def opened_up(scene: Scene) -> Picture:
    """Both bodies cut open along the same material."""
    straight = _cut_view(scene)
    view = tilted(straight, 24.0, 16.0)
    values = (scene.places[0] - scene.middle[0]) @ straight.toward
    height, width = panel_shape(2, 0.8 * scene.tall((view,)))
    scale = scene.mm_per_px((view,), (height, width))
    row = []
    for side, moved in enumerate((None, scene.places[1])):
        sheets = bodies.opened(scene.places[0], scene.tets, scene.labels, values, scene.tet_colours, moved)
        picture = bodies.paint(sheets, view, scene.centres[side], mm_per_px=scale, height=height, width=width)
        words = ("cut by a plane", "opened along the image of that plane")[side]
        row.append(Panel(picture, f"{_heading(side)}, {words}", view, scale, slanted=True))
    figure = plate([row], foot_in=charts.BAR_IN)
    charts.colour_bar(figure, scene.limit, inverted=scene.inverted)
    return finish(
        figure,
        alt=f"Both bodies cut open, seen {straight.words}: the inside coloured by volume ratio, borders "
        "of labels as lines.",
        caption=f"Cut open {straight.words}: a plane in A, and in B the sheet of the same material. Cut "
        "faces are drawn without shading, so their colours read exactly on the scale. " + scales.INTERIOR,
    )


def parts(scene: Scene) -> list[Picture]:
    """Each label inside its half-transparent body; none when there is only one label."""
    if len(scene.inputs.labels) < 2:
        return []
    return [_parts(scene, scene.shown[k : k + 4]) for k in range(0, len(scene.shown), 4)]


def _parts(scene: Scene, labels: tuple[int, ...]) -> Picture:
    columns = 4 if len(labels) <= 2 else len(labels)
    height, width = panel_shape(columns, scene.tall((_OBLIQUE,)))
    scale = scene.mm_per_px((_OBLIQUE,), (height, width))
    hull = bodies.hull_faces(scene.tets)
    own = [bodies.label_faces(scene.tets, scene.labels, label) for label in labels]
    rows = []
    for side, points in enumerate(scene.places):
        ghost = bodies.Sheet(
            points, hull.triangles, scene.tet_colours[hull.tet], scene.labels[hull.tet], "ghost"
        )
        row = []
        for label, faces in zip(labels, own, strict=True):
            solid = bodies.Sheet(
                points, faces.triangles, scene.tet_colours[faces.tet], np.full(len(faces.tet), label)
            )
            rgb = bodies.paint(
                [solid, ghost], _OBLIQUE, scene.centres[side], mm_per_px=scale, height=height, width=width
            )
            heading = f"{_heading(side)[0]} · {scene.name(label)}"
            row.append(Panel(rgb, heading, _OBLIQUE, scale, slanted=True))
        rows.append(row)
    if len(labels) <= 2:
        rows = [[panel for pair in zip(*rows, strict=True) for panel in pair]]
    figure = plate(rows, foot_in=charts.BAR_IN)
    charts.colour_bar(figure, scene.limit, inverted=scene.inverted)
    names = ", ".join(scales.plain_text(scene.inputs.source.name_of(v), 60) for v in labels)
    return finish(
        figure,
        alt=f"One label at a time ({names}), in the source and in the target, inside the "
        "half-transparent whole body.",
        caption="Each label alone, coloured by the volume ratio of its own outermost tets, inside the "
        "whole body; all at one scale.",
    )


def label_cuts(scene: Scene) -> Picture:
    """Three cuts of each scan with the outlines of both."""
    inputs = scene.inputs
    view_set = (FRONT, LEFT, BELOW)
    height, width = panel_shape(3, scene.tall(view_set))
    scale = scene.mm_per_px(view_set, (height, width))
    back = Passage(inputs.map.reversed())
    came_back = back.carry(np.array(inputs.target_surface.points))
    own_a, own_b = inputs.map.mesh.interfaces, inputs.target_surface
    other_a = Surface(came_back, own_b.triangles, own_b.sides)
    other_b = Surface(inputs.map.images, own_a.triangles, own_a.sides)
    sides = (
        (inputs.source, inputs.source_image, own_a, other_a),
        (inputs.target, inputs.target_image, own_b, other_b),
    )
    rows = [
        [_cut_panel(scene, side, view, (height, width), scale, *stuff) for view in view_set]
        for side, stuff in enumerate(sides)
    ]
    return finish(
        plate(rows),
        alt="Three cuts of the source and of the target at right angles, with the outlines of their own "
        "labels as solid lines and of the other scan's labels, carried over by the map, as dashed lines.",
        caption=f"Cuts through one material point {scales.place(scene.middle[0])} mm in A, "
        f"{scales.place(scene.middle[1])} mm in B, along the world axes. Solid, coloured by label: the "
        "scan's own outlines. Dashed: the other scan's, carried over by the map. Where they part, the "
        "map does not reach the boundary. " + _grounds(inputs),
    )


def _grounds(inputs: ReportInput) -> str:
    images = [k for k, v in (("A", inputs.source_image), ("B", inputs.target_image)) if v is not None]
    if len(images) == 2:
        return "Background: the intensity images."
    if not images:
        return "Background: the label voxels."
    return f"Background: the intensity image in {images[0]}, the label voxels in the other."


def _cut_panel(
    scene: Scene,
    side: int,
    view: View,
    shape: tuple[int, int],
    scale: float,
    volume: LabelVolume,
    image: ImageVolume | None,
    own: Surface,
    other: Surface,
) -> Panel:
    middle, centre = scene.middle[side], scene.centres[side]
    at = centre + ((middle - centre) @ view.toward) * view.toward
    plane = cuts.Plane(view, at, scale, *shape)
    colours = scales.label_colours(scene.inputs.labels)
    if image is None:
        ground = cuts.label_ground(volume, plane, colours)
    else:
        ground = cuts.image_ground(image, plane, cuts.image_window(image))
    lines = [
        *cuts.outlines(own, plane, colours, dashed=False),
        *cuts.outlines(other, plane, colours, dashed=True),
    ]
    axis = int(np.argmax(np.abs(view.toward)))
    heading = f"{_heading(side)}, {'xyz'[axis]} = {scales.fixed(middle[axis], 1)} mm, {view.words}"
    return Panel(ground, heading, view, scale, lines=lines)


def ratio_histogram(scene: Scene) -> Picture:
    """Share of volume by volume ratio, a row a label."""
    mesh, J = scene.inputs.map.mesh, scene.inputs.map.volume_ratio
    chosen = [scene.labels == v for v in scene.shown]
    voxel_ratios = [voxel_ratio(scene.inputs, v) for v in scene.shown]
    figure = charts.histogram(
        [J[c] for c in chosen],
        [np.abs(mesh.volumes[c]) for c in chosen],
        [scene.name(v) for v in scene.shown],
        voxel_ratios,
        scene.limit,
    )
    return finish(
        figure,
        alt="Histograms of the volume ratio, one a label, each bar the share of the label's source volume.",
        caption="How much of each label's source volume has which volume ratio. Dashed: the ratio of "
        "the voxel counts. Values beyond the ends are gathered in the outermost bars.",
    )


def voxel_ratio(inputs: ReportInput, label: int) -> float:
    """Volume of a label's voxels in the target over that in the source; NaN when the source lacks it."""
    a, b = (
        int((volume.labels == label).sum()) * volume.grid.voxel_mm3
        for volume in (inputs.source, inputs.target)
    )
    return b / a if a else float("nan")


def solve_picture(inputs: ReportInput) -> Picture | None:
    """The course of the solve; None when it is not known."""
    if len(inputs.history) < 2:
        return None
    last = inputs.history[-1]
    return finish(
        charts.solve_course(inputs.history),
        alt=f"Boundary residual, boundary weight and smallest volume ratio over {len(inputs.history)} "
        f"Newton steps; the residual ended at {scales.mm(last.residual_mm)}.",
        caption="The solve, step by step. Smallest volume ratio met at any step: "
        f"{scales.number(min(h.smallest_ratio for h in inputs.history))}.",
    )
