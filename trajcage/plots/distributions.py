"""Figures of distributions over cages: free volumes and windows."""

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from trajcage.model import CageStatus
from trajcage.plots.facts import Facts, number_of
from trajcage.plots.style import INK, PALETTE, Drawing, Missing, legend, new_figure
from trajcage.wording import with_error

__all__ = ["free_volume", "lattice_groups", "quantiles", "windows"]

_WINDOW_BIN = 0.005
_DASHES = ("--", ":", "-.", (0, (6, 2, 1, 2, 1, 2)))


def free_volume(facts: Facts) -> Drawing | Missing:
    """Distribution of the free volume with its means and the ideal lattices."""
    edges = facts.array("histograms/free_volume/edges")
    counts = facts.array("histograms/free_volume/counts")
    total = counts.sum()
    if total == 0:
        return Missing(f"no cage is closed. {facts.left_out()}")
    d = facts.dimensions
    edges = edges / facts.diameter**d
    outside = sum(
        int(facts.array(f"histograms/free_volume/{end}")) for end in ("below", "above")
    )
    width = np.diff(np.log10(edges))
    density = counts / (total + outside) / width
    error = np.sqrt(counts) / (total + outside) / width
    drawing, (axes,) = new_figure(
        f"Distribution of the free {facts.volume}",
        facts.caption(
            f"{int(total)} closed cages of all frames in 20 bins a decade; bars: "
            "counting errors, cages taken as independent.",
            facts.left_out(),
            f"{outside} outside the bins." if outside else "",
            "Lattices: cage of a site at this packing fraction and number density, all "
            f"others fixed (packing fraction {facts.mean('packing_fraction')[0]:.4f}).",
        ),
    )
    used = np.flatnonzero(counts)
    shown = slice(used[0], used[-1] + 1)
    axes.stairs(
        density[shown], edges[used[0] : used[-1] + 2], fill=True, color="#dfe3ee"
    )
    axes.stairs(density[shown], edges[used[0] : used[-1] + 2], color=PALETTE[0], lw=1.5)
    middle = np.sqrt(edges[1:] * edges[:-1])
    axes.errorbar(
        middle[used],
        density[used],
        error[used],
        fmt="none",
        ecolor=PALETTE[0],
        elinewidth=0.8,
        capsize=0,
    )
    for name, label, dashes in (
        ("free_volume_mean", "mean", "-"),
        ("free_volume_geometric_mean", "geometric mean", "--"),
    ):
        mean, _ = facts.mean(name)
        if mean > 0.0:
            text = f"{label} {with_error(*facts.mean(name))}"
            axes.axvline(mean, color=INK, ls=dashes, lw=1.0, label=text)
    _mark_lattices(axes, facts, "free_volume")
    axes.set_xscale("log")
    axes.set_ylim(0.0, 1.08 * float(np.max(density + error)))
    axes.set_xlabel(f"free {facts.volume} $v_f$ / $D^{d}$")
    axes.set_ylabel("density in $\\log_{10} v_f$")
    legend(axes)
    return drawing


def windows(facts: Facts) -> Drawing | Missing:
    """Distribution of the opening ratio of the weakest window of every cage."""
    ratios, status = facts.result["weakest_window"], facts.result["cage_status"]
    counts = np.zeros(round(1.0 / _WINDOW_BIN), dtype=np.int64)
    edges = np.linspace(0.0, 1.0, len(counts) + 1)
    for frame in range(facts.n_frames):
        closed = np.asarray(status[frame]) == CageStatus.CLOSED
        values = np.asarray(ratios[frame], dtype=np.float64)[closed]
        counts += np.histogram(values[np.isfinite(values)], edges)[0]
    total = int(counts.sum())
    if total == 0:
        return Missing(f"no cage has a shut window. {facts.left_out()}")
    drawing, (axes,) = new_figure(
        "Weakest window of each cage",
        facts.caption(
            f"Largest opening ratio of the shut windows of each of {total} closed cages "
            f"of all frames, bins of {_WINDOW_BIN:g}; bars: counting errors, cages taken "
            "as independent. At 1 the window would be just open.",
            facts.left_out(),
            "Lattices at packing fraction "
            f"{facts.mean('packing_fraction')[0]:.4f}, all others fixed.",
        ),
    )
    density, error = counts / total / _WINDOW_BIN, np.sqrt(counts) / total / _WINDOW_BIN
    used = np.flatnonzero(counts)
    low = max(0, used[0] - 2)
    axes.stairs(density[low:], edges[low:], fill=True, color="#dfe3ee")
    axes.stairs(density[low:], edges[low:], color=PALETTE[0], lw=1.5)
    middle = 0.5 * (edges[1:] + edges[:-1])
    axes.errorbar(
        middle[used],
        density[used],
        error[used],
        fmt="none",
        ecolor=PALETTE[0],
        elinewidth=0.8,
        capsize=0,
    )
    text = f"mean {with_error(*facts.mean('weakest_window_mean'))}"
    axes.axvline(facts.mean("weakest_window_mean")[0], color=INK, lw=1.0, label=text)
    _mark_lattices(axes, facts, "weakest_window")
    axes.set_ylim(0.0, 1.08 * float(np.max(density + error)))
    axes.set_xlabel("opening ratio of the weakest window")
    axes.set_ylabel("probability density")
    legend(axes)
    return drawing


def lattice_groups(facts: Facts, name: str) -> list[tuple[str, float]]:
    """Values of the ideal lattices; those that cannot be told apart share a name."""
    groups: list[tuple[str, float]] = []
    for row in facts.summary["lattices"]:
        value = number_of(row[name])
        if row["cage_status"] != "closed" or not value > 0.0:
            continue
        for k, (names, other) in enumerate(groups):
            if abs(value / other - 1.0) < 1e-6:
                groups[k] = (f"{names}, {row['name']}", other)
                break
        else:
            groups.append((row["name"], value))
    return groups


def quantiles(
    edges: NDArray[np.float64], counts: NDArray[np.float64], shares: tuple[float, ...]
) -> list[float]:
    """Read quantiles off a histogram with logarithmic bins."""
    below = np.concatenate(([0.0], np.cumsum(counts))) / counts.sum()
    return [float(10.0 ** np.interp(s, below, np.log10(edges))) for s in shares]


def _mark_lattices(axes: Axes, facts: Facts, name: str) -> None:
    for k, (names, value) in enumerate(lattice_groups(facts, name)):
        axes.axvline(
            value,
            color=PALETTE[1 + k % 4],
            ls=_DASHES[k % len(_DASHES)],
            label=f"{names} {value:.4g}",
        )
