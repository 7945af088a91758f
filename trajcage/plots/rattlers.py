"""Figure of rattlers: their fraction against the contact tolerance."""

import numpy as np

from trajcage.plots.facts import Facts
from trajcage.plots.style import INK, PALETTE, Drawing, Missing, legend, new_figure
from trajcage.wording import with_error

__all__ = ["rattlers"]


def rattlers(facts: Facts) -> Drawing | Missing:
    """Rattler fraction for every contact tolerance, with its plateau."""
    missing = facts.lacks("rattlers", "rattlers")
    if missing is not None:
        return missing
    tolerances = np.array(facts.parameters["options"]["contacts.tolerances"])
    curves = facts.series("rattler_fraction_curve")
    known = curves[np.isfinite(curves).all(axis=1)]
    if len(known) == 0:
        return Missing("every particle may touch others beyond an open edge")
    ranges = facts.series("rattler_plateau_range")
    ranges = ranges[np.isfinite(ranges).all(axis=1)]
    unknown = int(facts.series("rattler_unknown").sum())
    plateau, fraction = facts.mean("rattler_plateau"), facts.mean("rattler_fraction")
    drawing, (axes,) = new_figure(
        "Rattlers and the contact tolerance",
        facts.caption(
            f"Line: median of the frames ({len(known)}); band: lowest and highest.",
            f"Plateau on {len(ranges)} of {facts.n_frames} frames"
            + (
                "."
                if len(ranges)
                else ": contacts and rattlers depend on the tolerance, as in thermal "
                "configurations."
            ),
            f"Left out, next to an open edge: {unknown} of "
            f"{facts.n_particles * facts.n_frames} over all frames.",
        ),
    )
    if len(ranges):
        low, high = np.median(ranges, axis=0)
        text = f"plateau\n{with_error(*plateau)}"
        axes.axvspan(low, high, color="#fbe3b0", lw=0, label=text, zorder=0)
    axes.fill_between(
        tolerances,
        known.min(axis=0),
        known.max(axis=0),
        color=PALETTE[0],
        alpha=0.2,
        lw=0,
    )
    axes.plot(
        tolerances,
        np.median(known, axis=0),
        "o-",
        color=PALETTE[0],
        label="median frame",
    )
    tolerance = facts.mean("contact_tolerance")[0]
    if tolerance > 0.0:
        text = f"tolerance {tolerance:.2g}\nrattlers {with_error(*fraction)}"
        axes.axvline(tolerance, color=INK, ls="--", lw=1.0, label=text)
    axes.set_xscale("log")
    axes.set_ylim(-0.03, 1.03)
    axes.set_xlabel("largest gap of a contact / sum of the radii")
    axes.set_ylabel("rattler fraction")
    legend(axes)
    return drawing
