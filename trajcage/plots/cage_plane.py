"""A cage of a hard disk: as a picture, and as a page to zoom in a browser."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import to_rgb
from matplotlib.patches import Circle, PathPatch
from matplotlib.path import Path
from matplotlib.patheffects import withStroke
from numpy.typing import NDArray

from trajcage.analysis.cage_outline import CageOutline
from trajcage.plots.cage_page import SCENE_STYLE, neighbor_list, scene_script
from trajcage.plots.cage_picture import WINDOW, cage_facts, cage_figure
from trajcage.plots.page import bullets, page, section
from trajcage.plots.style import INK, PALETTE, Drawing, settle

__all__ = ["plane_drawing", "plane_page"]

_POINTS = 65  # along an arc of a picture; a page has true arcs
_SCALE = 1000.0  # units of the page in a diameter, as browsers dislike tiny ones
_FILL = "#fdf3dc"


def plane_drawing(cage: CageOutline, source: str) -> Drawing:
    """Draw a cage in the plane.

    Parameters
    ----------
    cage : CageOutline
        Its wall.
    source : str
        File and frame, for the caption.
    """
    drawing, (among, enlarged) = cage_figure(cage, source, "pair")
    d = 2.0 * cage.radius
    centers, radii = cage.vectors / d, cage.radii / d
    for k, (center, radius) in enumerate(zip(centers, radii, strict=True)):
        color = to_rgb(PALETTE[k % len(PALETTE)])
        among.add_patch(Circle(center, radius, fc=(*color, 0.2), ec=INK, lw=0.7))
        among.annotate(
            str(cage.neighbors[k]),
            center,
            ha="center",
            va="center",
            zorder=5,
            path_effects=[withStroke(linewidth=2.5, foreground="white")],
        )
    for axes in (among, enlarged):
        _wall(axes, cage, 1.0 if axes is among else 2.2)
        _window(axes, cage)
        axes.set_aspect("equal")
        axes.grid(visible=False)
        axes.set_xlabel("$D$")
        axes.locator_params(nbins=5)
    for axes, (left, bottom, edge) in zip(
        (among, enlarged), (_whole(cage), _close(cage)), strict=True
    ):
        axes.set_xlim(left, left + edge)
        axes.set_ylim(bottom, bottom + edge)
    settle(drawing.figure)
    return drawing


def plane_page(cage: CageOutline, source: str) -> str:
    """Write the page of a cage in the plane; parameters as :func:`plane_drawing`."""
    d = 2.0 * cage.radius
    whole, close = _view_box(_whole(cage)), _view_box(_close(cage))
    scene = f"""<div id="scene">
<div id="view" tabindex="0">
<svg id="main" viewBox="{whole}" data-whole="{whole}" data-close="{close}"
  data-diameter="{d:.10g}" data-scale="{_SCALE:g}" width="100%" height="100%" role="img"
  aria-label="The wall of the cage among its bounding neighbors">
{_svg(cage)}
</svg>
<div id="inset" hidden><svg style="background:#fff" viewBox="{whole}" width="100%" height="100%"
  ><use href="#drawing"/></svg></div>
<div id="told" aria-live="polite"></div>
<div id="scale"><div id="bar"></div><span id="bar-text"></span></div>
</div>
<div id="key">
<p><button id="near" type="button">fit the cage</button>
<button id="far" type="button">fit the neighbors</button></p>
<p><label><input type="checkbox" id="neighbors" checked> neighbors</label><br>
<label><input type="checkbox" id="window" checked> weakest window</label></p>
<p>Drag to shift, the wheel or + and - to zoom.</p>
<p>Filled: the cage; its wall in the color of the neighbor that each arc belongs to.
Translucent disks: the bounding neighbors at their true size and place.
<span style="color:{WINDOW}">Dark red</span>: the pair of the weakest window, and the
corner of the wall behind it. Small frame: the whole, when the view is but a part.</p>
<p>Bounding neighbors by id; point at one to see which it is:</p>
{neighbor_list(cage.neighbors, cage.vectors / d, cage.radii / d)}
</div></div>"""
    facts = section("What is seen", bullets(cage_facts(cage)))
    title = f"Cage of particle {cage.particle_id}"
    script = scene_script("cage_plane.js")
    return page(title, source, [SCENE_STYLE, scene, facts], script=script)


def _wall(axes: Axes, cage: CageOutline, width: float) -> None:
    """Fill the cage and draw its arcs."""
    d = 2.0 * cage.radius
    lines = []
    for loop in cage.loops:
        points = [cage.points(arc, _POINTS)[::-1] for arc in loop]
        lines.append(Path(np.concatenate(points) / d, closed=True))
    axes.add_patch(
        PathPatch(Path.make_compound_path(*lines), fc=_FILL, ec="none", zorder=2)
    )
    for arc, row in enumerate(cage.patch):
        x, y = cage.points(arc, _POINTS).T / d
        axes.plot(x, y, color=PALETTE[row % len(PALETTE)], lw=width, zorder=3)


def _window(axes: Axes, cage: CageOutline) -> None:
    d = 2.0 * cage.radius
    if cage.window:
        x, y = cage.vectors[list(cage.window)].T / d
        axes.plot(x, y, color=WINDOW, lw=2.0, zorder=4)
    axes.plot(*cage.window_corner / d, "o", color=WINDOW, ms=5, zorder=4)


def _whole(cage: CageOutline) -> tuple[float, float, float]:
    """Left, bottom and edge of a square around the neighbors, in diameters."""
    d = 2.0 * cage.radius
    low = (cage.vectors - cage.radii[:, None]).min(axis=0) / d
    high = (cage.vectors + cage.radii[:, None]).max(axis=0) / d
    return _square(low, high, 1.04)


def _close(cage: CageOutline) -> tuple[float, float, float]:
    """Left, bottom and edge of a square around the cage, in diameters."""
    points = np.concatenate([cage.points(k, _POINTS) for k in range(len(cage.patch))])
    points /= 2.0 * cage.radius
    return _square(points.min(axis=0), points.max(axis=0), 1.5)


def _square(
    low: NDArray[np.float64], high: NDArray[np.float64], room: float
) -> tuple[float, float, float]:
    edge = room * float((high - low).max())
    left, bottom = 0.5 * (low + high - edge)
    return float(left), float(bottom), edge


def _view_box(square: tuple[float, float, float]) -> str:
    left, bottom, edge = square
    numbers = (left, -bottom - edge, edge, edge)
    return " ".join(f"{_SCALE * x:.8g}" for x in numbers)


def _svg(cage: CageOutline) -> str:
    """Write the drawing as SVG, whose y axis points down."""
    d = 2.0 * cage.radius

    def place(point: NDArray[np.float64]) -> str:
        return f"{_SCALE * point[0] / d:.10g} {-_SCALE * point[1] / d:.10g}"

    def follow(arc: int) -> str:
        # against its angles, in halves, so that any arc is less than half a circle
        radius = f"{_SCALE * cage.sigmas[cage.patch[arc]] / d:.10g}"
        _, middle, start = cage.points(arc, 3)[::-1]
        return "".join(f"A{radius} {radius} 0 0 1 {place(p)}" for p in (middle, start))

    def begin(arc: int) -> str:
        return f"M{place(cage.points(arc, 2)[1])}"

    thin = 'vector-effect="non-scaling-stroke"'
    disks, names, arcs = [], [], []
    for k, (vector, radius) in enumerate(zip(cage.vectors, cage.radii, strict=True)):
        x, y = place(vector).split()
        color = PALETTE[k % len(PALETTE)]
        disks.append(
            f'<circle cx="{x}" cy="{y}" r="{_SCALE * radius / d:.10g}" fill="{color}" '
            f'fill-opacity="0.2" stroke="{INK}" {thin}/>'
        )
        names.append(
            f'<text x="{x}" y="{y}" text-anchor="middle" dominant-baseline="central" '
            f'fill="{INK}" stroke="#fff" stroke-width="3" paint-order="stroke" {thin}>'
            f"{cage.neighbors[k]}</text>"
        )
    for arc, row in enumerate(cage.patch):
        arcs.append(
            f'<path d="{begin(arc)}{follow(arc)}" stroke="{PALETTE[row % len(PALETTE)]}" '
            f'stroke-width="3" {thin}/>'
        )
    outline = "".join(
        f"{begin(loop[0])}{''.join(follow(arc) for arc in loop)}Z"
        for loop in cage.loops
    )
    pair = " ".join(place(cage.vectors[k]).replace(" ", ",") for k in cage.window)
    x, y = place(cage.window_corner).split()
    size = 0.012 * _SCALE * _close(cage)[2]
    line = (
        f'<polyline points="{pair}" fill="none" stroke="{WINDOW}" stroke-width="3" '
        f"{thin}/>"
    )
    dot = f'<circle cx="{x}" cy="{y}" r="{size:.6g}" fill="{WINDOW}"/>'
    return "\n".join(
        (
            '<g id="drawing">',
            f'<path id="cage" d="{outline}" fill="{_FILL}" fill-rule="evenodd"/>',
            f'<g id="disks">{"".join(disks)}</g>',
            f'<g id="wall" fill="none">{"".join(arcs)}</g>',
            f'<g id="weakest">{line}{dot}</g>',
            f'<g id="names" pointer-events="none">{"".join(names)}</g></g>',
        )
    )
