"""Figures against the packing fraction: lattices, thresholds, equations of state."""

import math
from functools import lru_cache
from itertools import pairwise

import numpy as np
from matplotlib.axes import Axes
from matplotlib.transforms import blended_transform_factory
from numpy.typing import NDArray

from trajcage.lattices import (
    LATTICES,
    EquationOfState,
    disk_mixture,
    equations,
    lattice,
    phase_marks,
    sphere_mixture,
    thresholds,
)
from trajcage.plots.distributions import quantiles
from trajcage.plots.facts import Facts, number_of
from trajcage.plots.style import (
    FADED,
    INK,
    PALETTE,
    Drawing,
    Missing,
    legend,
    new_figure,
)
from trajcage.wording import with_error

__all__ = ["lattices", "pressure"]

# keeps words readable where lines pass
_BEHIND = {"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 0.6}
_DASHES = ("-", "--", ":", "-.", (0, (6, 2, 1, 2, 1, 2)))


def lattices(facts: Facts) -> Drawing | Missing:
    """Mean free volume among the curves of the ideal lattices."""
    d = facts.dimensions
    mean, error = facts.mean("free_volume_mean")
    if not mean > 0.0:
        return Missing(f"no cage is closed. {facts.left_out()}")
    phi = facts.mean("packing_fraction")[0]
    edges = facts.array("histograms/free_volume/edges") / facts.diameter**d
    counts = facts.array("histograms/free_volume/counts")
    low, high = quantiles(edges, counts, (0.05, 0.95))
    drawing, (axes,) = new_figure(
        f"Free {facts.volume} beside ideal lattices",
        facts.caption(
            "Means over all frames with blocking errors (smaller than the mark if not "
            f"seen); thin bar: 5 to 95 percent of {int(counts.sum())} closed cages.",
            facts.left_out(),
            "Curves: cage of one site, all others fixed, for equal particles of the "
            "same number density. Circle: further shells begin to bound the cage; "
            "cross: it opens, and the particle leaves. Upright lines: published for "
            "equal particles.",
        ),
    )
    unit = facts.equal_diameter**d
    names = [n for n, entry in LATTICES.items() if entry.dimensions == d]
    lowest = min(low, mean, 1e-3 * unit) / 5.0
    for k, name in enumerate(names):
        x, y = _lattice_curve(name)
        limits = thresholds(name)
        # of the crystals of spheres only two coincide: the broader line stays visible
        broad = 3.6 if name == "hcp" else 1.5
        color = PALETTE[(k + 1) % len(PALETTE)]
        axes.plot(
            x,
            y * unit,
            ls=_DASHES[k % len(_DASHES)],
            lw=broad,
            alpha=0.55 if broad > 2 else 1.0,
            color=color,
            label=name,
            zorder=1.9 if broad > 2 else 2,
        )
        for limit, mark in ((limits.growth, "o"), (limits.escape, "x")):
            if limit is not None:
                v = lattice(name, limit.value).free_volume * unit
                axes.plot(limit.value, v, mark, color=color, mfc="white", zorder=3)
    axes.plot([phi, phi], [low, high], color=INK, lw=1.0, zorder=4)
    axes.errorbar(
        phi,
        mean,
        error if error > 0 else None,
        fmt="D",
        ms=5,
        color=INK,
        zorder=5,
        label=f"measured mean\n{with_error(mean, error)}",
    )
    geometric = facts.mean("free_volume_geometric_mean")
    if geometric[0] > 0.0:
        axes.errorbar(
            phi,
            geometric[0],
            geometric[1] if geometric[1] > 0 else None,
            fmt="D",
            ms=5,
            mfc="white",
            color=INK,
            zorder=5,
            label=f"geometric mean\n{with_error(*geometric)}",
        )
    axes.set_yscale("log")
    axes.set_ylim(bottom=lowest)
    axes.set_xlim(0.12, max(LATTICES[n].close_packing.value for n in names) + 0.01)
    axes.set_xlabel("packing fraction")
    axes.set_ylabel(f"free {facts.volume} $v_f$ / $D^{d}$")
    _mark_phases(axes, facts, top=True)
    legend(axes)
    return drawing


def pressure(facts: Facts) -> Drawing | Missing:
    """Compressibility factor from cages beside the equations of state."""
    z, error = facts.mean("compressibility_factor")
    if not math.isfinite(z):
        statuses = facts.summary["compressibility_status"]
        told = ", ".join(
            f"{name.replace('_', ' ')} on {n} frames"
            for name, n in statuses.items()
            if n and name != "measured"
        )
        return Missing(f"the compressibility factor is missing: {told}")
    phi = facts.mean("packing_fraction")[0]
    found = facts.summary["observables"]["compressibility_factor"]
    kind = "equal particles" if facts.equal_radii else "the mixture"
    drawing, (axes, beside) = new_figure(
        "Compressibility factor from cages",
        facts.caption(
            "Z = 1 + <w/v>/(2d), mean of the ratio of wall sum and free "
            f"{facts.volume} over the closed cages; "
            + (
                f"blocking error over {found['n_values']} frames"
                if found["n_values"] > 1
                else "one value has no error"
            )
            + (
                f", {found['n_missing']} frames without Z left out"
                if found["n_missing"]
                else ""
            )
            + (
                "."
                if found["converged"] or found["n_values"] < 2
                else ": too few frames, a lower bound."
            ),
            facts.left_out(),
            f"It holds in equilibrium. Equations of state of {kind}, in their ranges; "
            "right: those that hold at this packing fraction. Upright lines: published "
            "for equal particles.",
        ),
        columns=2,
        width_ratios=(1.35, 1),
        size=(8.6, 4.2),
    )
    entries = _equations(facts)
    low, high = max(0.0, phi - 0.14), min(phi + 0.10, 0.9)
    tops = [z]
    for k, entry in enumerate(entries):
        left, right = max(low, entry.lowest), min(high, entry.highest)
        if left >= right:
            continue
        x = np.linspace(left, right, 200)
        y = np.array([entry.compressibility_factor(float(p)) for p in x])
        good = np.isfinite(y)
        near = good & (np.abs(x - phi) < 0.06)
        tops += [float(y[near].max())] if near.any() else []
        dashes = _DASHES[k % len(_DASHES)]
        color = PALETTE[k % len(PALETTE)]
        text = f"{entry.name} ({entry.phase})"
        axes.plot(x[good], y[good], ls=dashes, color=color, label=text)
    bar = error if error > 0 else None
    axes.errorbar(
        phi,
        z,
        bar,
        fmt="D",
        ms=5,
        color=INK,
        zorder=5,
        label=f"cages {with_error(z, error)}",
    )
    axes.set_xlim(low, high)
    axes.set_ylim(0.0, 1.25 * max(tops))
    axes.set_xlabel("packing fraction")
    axes.set_ylabel("$Z = PV / (N k T)$")
    _mark_phases(axes, facts, top=False)
    axes.legend(
        loc="upper center",
        bbox_to_anchor=(0.5, -0.17),
        ncols=2,
        fontsize=7,
        columnspacing=1.0,
    )
    _deviations(beside, facts, entries, z, error)
    return drawing


def _deviations(
    axes: Axes, facts: Facts, entries: list[EquationOfState], z: float, error: float
) -> None:
    """Draw relative deviations of the measured value, one row an equation."""
    rows = facts.summary["equations_of_state"]
    places = {entry.name: k for k, entry in enumerate(entries)}
    axes.axvline(0.0, color=FADED, lw=1.0)
    axes.grid(visible=False, axis="y")
    reach = 0.0
    for k, row in enumerate(rows):
        factor = number_of(row["compressibility_factor"])
        x, dx = 100.0 * (z / factor - 1.0), 100.0 * error / factor
        reach = max(reach, abs(x) + (dx if dx > 0 else 0.0))
        color = PALETTE[places.get(row["name"], 0) % len(PALETTE)]
        bar = dx if dx > 0 else None
        axes.errorbar(x, k, xerr=bar, fmt="D", color=color, ms=5)
        axes.annotate(
            f"{row['name']}, Z = {factor:.5g}",
            (0.02, k),
            xycoords=axes.get_yaxis_transform(),
            xytext=(0, 7),
            textcoords="offset points",
            fontsize=7,
            bbox=_BEHIND,
        )
    if not rows:
        axes.text(
            0.5,
            0.5,
            "no equation of state\nholds at this packing fraction",
            transform=axes.transAxes,
            ha="center",
        )
    reach = 1.3 * reach or 1.0
    axes.set_xlim(-reach, reach)
    axes.set_ylim(max(len(rows), 1) - 0.5, -0.8)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    axes.set_xlabel("measured above the equation (percent)")


def _equations(facts: Facts) -> list[EquationOfState]:
    if facts.equal_radii:
        return list(equations(dimensions=facts.dimensions))
    mixture = sphere_mixture if facts.dimensions == 3 else disk_mixture
    return [mixture(facts.radii)]


def _mark_phases(axes: Axes, facts: Facts, *, top: bool) -> None:
    """Mark published packing fractions; names run along their lines at one end."""
    low, high = axes.get_xlim()
    place = blended_transform_factory(axes.transData, axes.transAxes)
    marks = [
        m for m in phase_marks(facts.dimensions) if low < m.packing_fraction < high
    ]
    places = [mark.packing_fraction for mark in marks]
    tight = [b - a < 0.045 * (high - low) for a, b in pairwise(places)]
    level = 0
    for k, (mark, phi) in enumerate(zip(marks, places, strict=True)):
        axes.axvline(phi, color=FADED, lw=0.8, ls=(0, (2, 2)), zorder=1)
        # Of neighbors too close to read side by side, the last writes on its other
        # side, and those between further along their lines.
        before, after = k > 0 and tight[k - 1], k < len(tight) and tight[k]
        level = level + 1 if before and after else 0
        reach = 0.015 + 0.3 * level
        axes.annotate(
            mark.name,
            (phi, 1.0 - reach if top else reach),
            xycoords=place,
            xytext=(2.5 if before and not after else -2.5, 0.0),
            textcoords="offset points",
            rotation=90,
            fontsize=6.5,
            color="#555555",
            ha="left" if before and not after else "right",
            va="top" if top else "bottom",
            bbox=_BEHIND,
        )


@lru_cache(maxsize=16)
def _lattice_curve(name: str) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Free volume of a lattice from where its cage opens up to close packing."""
    limits = thresholds(name)
    low, high = limits.escape.value, limits.close_packing.value
    start = low if limits.growth is None else limits.growth.value
    gaps = np.geomspace(high - start, 1e-4, 60)  # dense where the curve falls
    x = high - gaps
    if limits.growth is not None:
        x = np.concatenate((np.linspace(low, start, 10)[:-1], x))
    x[0] = low
    y = np.array([lattice(name, float(p)).free_volume for p in x])
    return x, y
