"""Figures in time: fractions of regions, survival of cages, correlations."""

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from trajcage.plots.facts import Facts, number_of
from trajcage.plots.style import (
    FADED,
    INK,
    PALETTE,
    REGION_COLORS,
    Drawing,
    Missing,
    legend,
    log_ticks,
    new_figure,
)
from trajcage.wording import with_error

__all__ = ["correlations", "regions", "survival"]

_REGION_LINES = {"crystal": ("-", "o"), "glass": ("--", "s"), "fluid": (":", "^")}
_MANY = 80  # frames beyond which marks hide the line


def regions(facts: Facts) -> Drawing | Missing:
    """Fractions of crystal, glass and fluid on every frame."""
    missing = facts.lacks("regions", "regions")
    if missing is not None:
        return missing
    unknown = facts.series("region_unknown")
    fractions = {name: facts.series(f"{name}_fraction") for name in _REGION_LINES}
    if not any(np.isfinite(values).any() for values in fractions.values()):
        return Missing("the region of every particle is unknown on every frame")
    needs = facts.series("glass_needs_unbroken")
    left_out = facts.summary["observables"]["glass_fraction"]["n_missing"]
    drawing, (axes,) = new_figure(
        "Regions in time",
        facts.caption(
            "Shares of the particles of known region on each frame; legend: mean over "
            "frames with blocking error, shaded.",
            f"Left out, region unknown: {int(unknown.sum())} of "
            f"{facts.n_particles * facts.n_frames} over all frames.",
            "Crystal: solid by bond order; glass: else in a closed cage"
            + (
                " that has not broken within the mobility window; fluid: the rest. While "
                "that window is not yet full, too many count as glass: frames left "
                f"out of the means of glass and fluid: {left_out}."
                if needs.all()
                else "; fluid: the rest. No cage breaking was known."
            ),
        ),
    )
    for name, values in fractions.items():
        mean, error = facts.mean(f"{name}_fraction")
        line, mark = _REGION_LINES[name]
        color = REGION_COLORS[name]
        if error > 0.0:
            axes.axhspan(mean - error, mean + error, color=color, alpha=0.25, lw=0)
        axes.plot(
            facts.times,
            values,
            ls=line,
            marker=mark if facts.n_frames <= _MANY else None,
            color=color,
            label=f"{name} {with_error(mean, error)}",
        )
    full = _window_full(facts) if needs.all() else None
    if full is not None:
        text = "mobility window\nnot yet full"
        axes.axvspan(facts.times[0], full, color="#eeeeee", lw=0, zorder=0, label=text)
    axes.set_ylim(-0.03, 1.03)
    axes.set_xlabel(facts.time_label())
    axes.set_ylabel("share of particles")
    legend(axes)
    return drawing


def _window_full(facts: Facts) -> float | None:
    """Time from which on all breaks within the mobility window are known."""
    window = facts.parameters["options"]["time.mobility_window"]
    times = facts.times
    if len(times) < 2:
        return None
    length = 10.0 * (times[1] - times[0]) if window is None else float(window)
    return float(min(times[0] + length, times[-1]))


def survival(facts: Facts) -> Drawing | Missing:
    """Kaplan-Meier survival and persistence of cages with their bands."""
    missing = facts.lacks("time", "cage breaking")
    if missing is not None:
        return missing
    kinds = {
        "persistence": ("Cages of the first frame", "persistence", PALETTE[0], "-"),
        "survival": ("Cages that formed later", "lifetime", PALETTE[2], "--"),
    }
    curves = {name: facts.array(f"{name}/time") for name in kinds}
    if not any(len(time) for time in curves.values()):
        reasons = facts.summary["time_reasons"]
        return Missing(reasons.get("persistence", "no cage was followed in time"))
    scalars = facts.summary["time"]
    told = []
    for name, (label, prefix, _, _) in kinds.items():
        if len(curves[name]):
            told.append(
                f"{label}: {int(scalars[f'{prefix}_ended'])} broke, "
                f"{int(scalars[f'{prefix}_censored'])} still whole when last seen"
            )
        else:
            told.append(f"{label}: none")
    options = facts.parameters["options"]
    drawing, (axes,) = new_figure(
        "Survival of cages",
        facts.caption(
            "Kaplan-Meier estimates with pointwise 95 percent bands (Greenwood, cages "
            f"taken as independent). {'. '.join(told)}.",
            f"A cage is broken when {options['time.fraction_lost']:g} of its neighbors "
            f"are gone: bonded up to {options['time.bonded']:g} contact distances, lost "
            f"beyond {options['time.broken']:g}.",
        ),
    )
    for name, (label, prefix, color, line) in kinds.items():
        if len(curves[name]):
            median = number_of(scalars[f"{prefix}_median"])
            text = f"{label}\nmedian {median:.4g}" if np.isfinite(median) else label
            _step(axes, facts, name, color=color, ls=line, label=text)
            axes.plot(median, 0.5, "o", color=color, mfc="white")
    axes.axhline(0.5, color=FADED, lw=0.8, ls=":")
    axes.set_ylim(-0.03, 1.03)
    axes.set_xlim(left=0.0)
    axes.set_xlabel(facts.time_label("age of the cage"))
    axes.set_ylabel("probability to be whole")
    legend(axes)
    return drawing


def _step(axes: Axes, facts: Facts, name: str, **line: Any) -> None:
    """Draw one estimate as steps from age 0."""

    def column(part: str, start: float) -> NDArray[np.float64]:
        return np.concatenate(([start], facts.array(f"{name}/{part}")))

    time = column("time", 0.0)
    axes.step(time, column("survival", 1.0), where="post", **line)
    axes.fill_between(
        time,
        column("survival_lower", np.nan),
        column("survival_upper", np.nan),
        step="post",
        color=line["color"],
        alpha=0.18,
        lw=0,
    )


def correlations(facts: Facts) -> Drawing | Missing:
    """Correlations over logarithmic lags, six panels with common lags."""
    missing = facts.lacks("time", "correlations")
    if missing is not None:
        return missing
    lag = facts.array("correlations/lag")
    if len(lag) == 0:
        reasons = facts.summary["time_reasons"]
        return Missing(reasons.get("correlations", "no lag was measured"))
    origins = facts.array("correlations/n_origins")
    alone = facts.array("correlations/without_neighbors")
    converged = facts.array("correlations/errors_converged")
    scalars, reasons = facts.summary["time"], facts.summary["time_reasons"]
    overlap_length = number_of(scalars["overlap_length"])
    wave_number = number_of(scalars["wave_number"])
    drawing, panels = new_figure(
        "Correlations in time",
        facts.caption(
            "Averages over particles and time origins with blocking errors"
            + ("" if converged.all() else ", lower bounds where origins are few")
            + ("; no bar: a single origin." if (origins < 2).any() else "."),
            f"Overlap: displaced by at most {overlap_length:.3g} D; scattering at wave "
            f"number {wave_number:.4g}/D.",
            f"Left out of cage-relative values, without neighbors: {alone.mean():.3g} "
            "particles an origin.",
            f"chi_4: {reasons['chi_4_peak']}." if "chi_4_peak" in reasons else "",
        ),
        rows=3,
        columns=2,
        sharex=True,
        size=(7.8, 6.6),
    )
    lines = (
        (("neighbor_correlation", "bonds kept"), ("cage_correlation", "cages whole")),
        (("msd", "all"), ("cage_relative_msd", "relative to neighbors")),
        (("overlap", "overlap"), ("self_scattering", "self-scattering")),
        (("chi_4", "$\\chi_4$ of the overlap"),),
        (("non_gaussian", "non-Gaussian parameter"),),
    )
    for axes, panel in zip(panels, lines, strict=False):
        for k, (name, label) in enumerate(panel):
            scale = facts.diameter**2 if name.endswith("msd") else 1.0
            values = facts.array(f"correlations/{name}") / scale
            errors = facts.array(f"correlations/{name}_error") / scale
            _curve(axes, lag, values, errors, k, label)
        if axes.get_legend_handles_labels()[0]:
            axes.legend(loc="best", fontsize=7)
    panels[0].set_ylabel("share")
    panels[1].set_ylabel("mean sq. displacement / $D^2$")
    panels[1].set_yscale("log")
    log_ticks(panels[1].yaxis, *panels[1].dataLim.intervaly)
    panels[2].set_ylabel("correlation")
    panels[3].set_ylabel("$\\chi_4$")
    panels[4].set_ylabel("$\\alpha_2$")
    panels[5].plot(lag, origins, "o-", color=INK)
    panels[5].set_ylabel("time origins")
    panels[5].set_ylim(bottom=0.0)
    panels[5].yaxis.set_major_locator(MaxNLocator(integer=True, min_n_ticks=1))
    for k in (0, 2):
        panels[k].set_ylim(-0.05, 1.05)
    for axes in panels[4:]:
        axes.set_xscale("log")
        log_ticks(axes.xaxis, lag[0], lag[-1])
        axes.set_xlabel(facts.time_label("lag"))
    return drawing


def _curve(
    axes: Axes,
    lag: NDArray[np.float64],
    values: NDArray[np.float64],
    errors: NDArray[np.float64],
    k: int,
    label: str,
) -> None:
    if not np.isfinite(values).any():
        axes.set_yticks([])
        axes.text(
            0.5,
            0.5,
            "too few time origins",
            transform=axes.transAxes,
            ha="center",
            color=FADED,
        )
        return
    color = (PALETTE[0], PALETTE[1])[k]
    style = ("o-", "s--")[k]
    axes.errorbar(lag, values, errors, fmt=style, color=color, label=label, ms=3)
