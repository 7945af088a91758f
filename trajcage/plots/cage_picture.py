"""A cage as a still picture: among its neighbors, and enlarged."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import EllipseCollection, PolyCollection
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from trajcage.analysis.cage_mesh import CageMesh
from trajcage.analysis.cage_outline import CageOutline
from trajcage.plots.style import INK, PALETTE, Drawing, new_figure, settle
from trajcage.wording import listed

__all__ = ["WINDOW", "cage_drawing", "cage_facts", "cage_figure"]

# Seen from a little above and to the side, so that lattice cages do not hide depth.
_TURN, _TILT = np.radians(32.0), np.radians(24.0)
_LIGHT = np.array([-0.4, 0.5, 0.77])
#: Color of the weakest window.
WINDOW = PALETTE[2]


def cage_facts(cage: CageMesh | CageOutline) -> list[str]:
    """Say what is known of a cage, lengths in diameters of its particle."""
    d = 2.0 * cage.radius
    unit = f"D = {d:.6g} in the unit of the input, the diameter of the particle"
    window = listed([str(cage.neighbors[k]) for k in cage.window])
    ids = ", ".join(str(i) for i in cage.neighbors)
    facts = [
        f"Bounding neighbors: {len(cage.neighbors)} (ids {ids})",
        f"Weakest window: opening ratio {cage.weakest_window:.6g}, of {window}",
    ]
    if isinstance(cage, CageOutline):
        size = f"Free area {cage.free_volume / d**2:.6g} D²"
        return [
            f"{size}, free perimeter {cage.free_surface / d:.6g} D; {unit}",
            *facts,
        ]
    size = f"Free volume {cage.free_volume / d**3:.6g} D³"
    share = cage.volume / cage.free_volume
    return [
        f"{size}, free surface {cage.free_surface / d**2:.6g} D²; {unit}",
        *facts,
        f"{len(cage.triangles)} triangles hold {share:.6f} of the free volume",
    ]


def cage_figure(
    cage: CageMesh | CageOutline, source: str, window: str
) -> tuple[Drawing, list[Axes]]:
    """Start the figure of a cage: one view to scale, one of the wall alone.

    Parameters
    ----------
    cage : CageMesh or CageOutline
        Its wall.
    source : str
        File and frame, for the caption.
    window : str
        What the weakest window is made of, for the caption.
    """
    return new_figure(
        f"Cage of particle {cage.particle_id}",
        f"{source}. {'. '.join(cage_facts(cage))}. Left: true to scale, neighbors "
        f"translucent; right: the wall alone, one color a neighbor. Dark red: the {window} "
        "of the weakest window, and the corner of the wall behind it.",
        columns=2,
        size=(8.6, 4.0),
    )


def cage_drawing(mesh: CageMesh, source: str) -> Drawing:
    """Draw a cage.

    Parameters
    ----------
    mesh : CageMesh
        Its wall.
    source : str
        File and frame, for the caption.
    """
    drawing, (among, enlarged) = cage_figure(mesh, source, "triangle")
    turn = _rotation()
    d = 2.0 * mesh.radius
    vertices, centers = mesh.vertices @ turn.T / d, mesh.vectors @ turn.T / d
    radii = mesh.radii / d
    _neighbors(among, centers, radii, centers[:, 2] <= 0.0, alpha=0.5, order=1)
    _wall(among, mesh, vertices)
    _neighbors(among, centers, radii, centers[:, 2] > 0.0, alpha=0.18, order=3)
    reach = 1.03 * float((np.abs(centers[:, :2]).max(axis=1) + radii).max())
    _wall(enlarged, mesh, vertices)
    half = 1.15 * float(np.abs(vertices[:, :2]).max())
    if mesh.window:
        ring = centers[[*mesh.window, mesh.window[0]]]
        among.plot(ring[:, 0], ring[:, 1], color=WINDOW, lw=2.0, zorder=4)
    behind = turn @ mesh.window_corner / d
    enlarged.plot(behind[0], behind[1], "o", color=WINDOW, ms=6, zorder=4)
    for axes, extent in ((among, reach), (enlarged, half)):
        axes.set_xlim(-extent, extent)
        axes.set_ylim(-extent, extent)
        axes.set_aspect("equal")
        axes.grid(visible=False)
        axes.set_xlabel("$D$")
    settle(drawing.figure)
    return drawing


def _rotation() -> NDArray[np.float64]:
    c, s = np.cos(_TURN), np.sin(_TURN)
    about = np.array([[c, 0.0, s], [0.0, 1.0, 0.0], [-s, 0.0, c]])
    c, s = np.cos(_TILT), np.sin(_TILT)
    tilt = np.array([[1.0, 0.0, 0.0], [0.0, c, -s], [0.0, s, c]])
    return np.asarray(tilt @ about, dtype=np.float64)


def _wall(axes: Axes, mesh: CageMesh, vertices: NDArray[np.float64]) -> None:
    """Draw the triangles from back to front, lit from the upper left."""
    corners = vertices[mesh.triangles]
    order = np.argsort(corners[:, :, 2].mean(axis=1))
    corners = corners[order]
    normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    normal /= np.maximum(np.linalg.norm(normal, axis=1), 1e-300)[:, None]
    light = 0.62 + 0.38 * np.clip(normal @ _LIGHT / np.linalg.norm(_LIGHT), -1.0, 1.0)
    base = np.array([to_rgb(color) for color in PALETTE])
    pale = 0.55 + 0.45 * base
    colors = pale[mesh.patch[order] % len(base)] * light[:, None]
    axes.add_collection(
        PolyCollection(
            list(corners[:, :, :2]),
            facecolors=colors,
            edgecolors=colors,
            lw=0.3,
            zorder=2,
            rasterized=True,
        )
    )


def _neighbors(
    axes: Axes,
    centers: NDArray[np.float64],
    radii: NDArray[np.float64],
    shown: NDArray[np.bool_],
    *,
    alpha: float,
    order: int,
) -> None:
    rows = np.flatnonzero(shown)
    rows = rows[np.argsort(centers[rows, 2])]
    size = 2.0 * radii[rows]
    colors = [(*to_rgb(PALETTE[k % len(PALETTE)]), 0.35 * alpha) for k in rows]
    axes.add_collection(
        EllipseCollection(
            size,
            size,
            np.zeros(len(size)),
            units="xy",
            offsets=centers[rows, :2],
            transOffset=axes.transData,
            facecolors=colors,
            edgecolors=(*to_rgb(INK), alpha),
            lw=0.7,
            zorder=order,
        )
    )
