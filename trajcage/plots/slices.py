"""Map of a cut through the sample, true to scale."""

from dataclasses import dataclass

import numpy as np
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.collections import EllipseCollection
from matplotlib.colors import LogNorm, to_rgba_array
from matplotlib.patches import Patch, Polygon
from numpy.typing import NDArray

from trajcage.model import Box, CageStatus
from trajcage.plots.facts import Facts
from trajcage.plots.style import (
    INK,
    MAP,
    REGION_COLORS,
    Drawing,
    Missing,
    log_ticks,
    new_figure,
)

__all__ = ["Cut", "cut", "slices"]

_UNMEASURED = "#ffffff"
_MANY = 3000  # disks beyond which a vector figure holds them as a picture


@dataclass(frozen=True, eq=False)
class Cut:
    """Disks in which a plane cuts particles, periodic images included.

    Parameters
    ----------
    centers : (k, 2) float64, length
        Along the first edge of the box, and normal to it in the plane.
    radii : (k,) float64, length
        Of the disks: a sphere cut off its center shows a smaller one.
    particles : (k,) int64
        Whose disks.
    outline : (4, 2) float64, length
        Corners of the cell in the plane.
    """

    centers: NDArray[np.float64]
    radii: NDArray[np.float64]
    particles: NDArray[np.int64]
    outline: NDArray[np.float64]


def cut(positions: NDArray[np.float64], radii: NDArray[np.float64], box: Box) -> Cut:
    """Cut the box along its first two edges, halfway up the third.

    Parameters
    ----------
    positions : (n, d) float64, length
        Positions; in two dimensions all particles are in the plane.
    radii : (n,) float64, length
        Radii.
    box : Box
        The box.

    Returns
    -------
    Cut
    """
    d = box.dimensions
    places = box.fractional(positions)
    flags = np.asarray(box.periodic, dtype=np.bool_)
    places[:, flags] -= np.floor(places[:, flags])
    offset = np.zeros(len(places))
    if d == 3:
        apart = places[:, 2] - 0.5  # less than half an edge: the nearest image
        offset = apart * box.heights[2]
        up = np.cross(box.vectors[0], box.vectors[1])
        up /= np.linalg.norm(up)
        lean = box.vectors[2] - (box.vectors[2] @ up) * up
    else:
        apart, lean = offset, np.zeros(2)
    inside = np.flatnonzero(np.abs(offset) < radii)
    size = np.sqrt(radii[inside] ** 2 - offset[inside] ** 2)
    first = box.vectors[0] / np.linalg.norm(box.vectors[0])
    second = box.vectors[1] - (box.vectors[1] @ first) * first
    second /= np.linalg.norm(second)
    plane = np.stack((first, second))
    edges = box.vectors[:2] @ plane.T
    flat = places[inside, :2] @ edges + np.outer(apart[inside], lean @ plane.T)
    within = flat @ np.linalg.inv(edges)
    within[:, flags[:2]] -= np.floor(within[:, flags[:2]])
    margin = size[:, None] * np.linalg.norm(np.linalg.inv(edges), axis=0)
    centers, sizes, who = [], [], []
    for shift in np.ndindex(*(3 if p else 1 for p in flags[:2])):
        turns = np.where(flags[:2], np.array(shift) - 1.0, 0.0)
        image = within + turns
        seen = np.all((image > -margin) & (image < 1.0 + margin), axis=1)
        seen |= not flags[:2].any()
        centers.append(image[seen] @ edges)
        sizes.append(size[seen])
        who.append(inside[seen])
    corners = np.array([[0, 0], [1, 0], [1, 1], [0, 1]], dtype=np.float64) @ edges
    return Cut(
        np.concatenate(centers), np.concatenate(sizes), np.concatenate(who), corners
    )


def slices(facts: Facts) -> Drawing | Missing:
    """Cut of one frame, colored by region and by free volume."""
    result, d = facts.result, facts.dimensions
    if "position" not in result:
        return Missing(
            "the file holds no positions; measure again with --store-positions"
        )
    frame = facts.row
    positions = np.asarray(result["position"][frame], dtype=np.float64)
    radii = result.radii if result.radii.ndim == 1 else result.radii[frame]
    there = np.asarray(np.isfinite(positions).all(axis=1), dtype=np.bool_)
    found = cut(
        np.where(there[:, None], positions, 0.0),
        np.where(there, radii, 0.0),
        result.box(frame),
    )
    if len(found.radii) == 0:
        return Missing("the plane halfway up the third edge cuts no particle")
    has_regions = "region" in result
    status = np.asarray(result["cage_status"][frame])[found.particles]
    seen = np.unique(found.particles)
    unclosed = int(
        np.count_nonzero(
            np.asarray(result["cage_status"][frame])[seen] != CageStatus.CLOSED
        )
    )
    where = "the plane along the first two edges, halfway up the third"
    span = np.ptp(found.outline, axis=0)
    columns = 2 if has_regions else 1
    width = 8.6 if has_regions else 5.6
    tall = min(max((width / columns - 0.75) * span[1] / span[0], 1.2), 8.0)
    drawing, panels = new_figure(
        f"{'Slice through' if d == 3 else 'Map of'} frame {result.source_frames[frame]}",
        facts.caption(
            f"Time {result.times[frame]:.6g}{facts.unit_of_time}, "
            + (f"cut by {where}" if d == 3 else "all particles")
            + f": {len(seen)} particles as disks true to scale, periodic images at the "
            "edges.",
            f"Without a closed cage, white on the right: {unclosed}."
            if has_regions
            else f"Without a closed cage, white: {unclosed}.",
            "" if has_regions else f"Regions: {_no_regions(facts)}.",
            f"{np.count_nonzero(~there)} without position left out."
            if not there.all()
            else "",
        ),
        columns=columns,
        size=(width, tall + 1.42),
    )
    if has_regions:
        _draw_regions(panels[0], facts, found, frame, -0.48 / tall)
    volumes = np.asarray(result["free_volume"][frame], dtype=np.float64)
    values = volumes[found.particles] / facts.diameter**d
    closed = (status == CageStatus.CLOSED) & (values > 0.0)
    if closed.any():
        low, high = np.percentile(values[closed], (2.0, 98.0))
        high = max(high, 1.001 * low)
    else:
        low, high = 0.1, 1.0
    disks = _disks(panels[-1], found, facts.diameter)
    disks.set(
        cmap=colormaps[MAP].with_extremes(bad=_UNMEASURED), norm=LogNorm(low, high)
    )
    disks.set_array(np.ma.masked_array(values, ~closed))
    if closed.any():
        bar = drawing.figure.colorbar(
            disks,
            cax=panels[-1].inset_axes((0.0, -0.68 / tall, 1.0, 0.12 / tall)),
            extend="both",
            label=f"free {facts.volume} $v_f$ / $D^{d}$",
            orientation="horizontal",
        )
        log_ticks(bar.ax.xaxis, low, high)
    return drawing


def _no_regions(facts: Facts) -> str:
    missing = facts.lacks("regions", "regions")
    return missing.reason if missing is not None else "not in the file"


def _draw_regions(
    axes: Axes, facts: Facts, found: Cut, frame: int, below: float
) -> None:
    series = facts.result["region"]
    codes = np.asarray(series[frame])
    colors = to_rgba_array([REGION_COLORS[name] for name in series.codes])
    disks = _disks(axes, found, facts.diameter)
    disks.set_facecolor(colors[codes[found.particles]])
    shown = np.bincount(codes, minlength=len(series.codes))
    axes.legend(
        handles=[
            Patch(
                facecolor=REGION_COLORS[name],
                edgecolor=INK,
                lw=0.4,
                label=f"{name} {shown[k] / len(codes):.3f}",
            )
            for k, name in enumerate(series.codes)
            if shown[k] or name != "unknown"
        ],
        title="region and its share of the whole frame",
        title_fontsize=8,
        loc="upper center",
        bbox_to_anchor=(0.5, below),
        ncols=4,
        columnspacing=0.9,
        handlelength=1.0,
        handletextpad=0.5,
    )


def _disks(axes: Axes, found: Cut, diameter: float) -> EllipseCollection:
    """Draw the disks of a cut in an empty cell, in mean diameters."""
    outline = found.outline / diameter
    frame = Polygon(outline, closed=True, fill=False, ec=INK, lw=0.9, zorder=3)
    axes.add_patch(frame)
    size = 2.0 * found.radii / diameter
    disks = EllipseCollection(
        size,
        size,
        np.zeros(len(size)),
        units="xy",
        offsets=found.centers / diameter,
        transOffset=axes.transData,
        edgecolor=INK,
        lw=0.25,
        rasterized=len(size) > _MANY,
    )
    axes.add_collection(disks)
    disks.set_clip_path(frame)
    low, high = outline.min(axis=0), outline.max(axis=0)
    room = 0.01 * (high - low).max()
    axes.set_xlim(low[0] - room, high[0] + room)
    axes.set_ylim(low[1] - room, high[1] + room)
    axes.set_aspect("equal", anchor="N")
    axes.grid(visible=False)
    axes.set_xlabel("along the first edge / $D$")
    axes.set_ylabel("across / $D$")
    for side in ("left", "bottom"):
        axes.spines[side].set_visible(False)
    return disks
