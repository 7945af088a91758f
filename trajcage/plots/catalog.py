"""All figures by name."""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from types import MappingProxyType

from trajcage.errors import UsageError
from trajcage.plots.distributions import free_volume, windows
from trajcage.plots.dynamics import correlations, regions, survival
from trajcage.plots.facts import Facts
from trajcage.plots.pressure import lattices, pressure
from trajcage.plots.rattlers import rattlers
from trajcage.plots.slices import slices
from trajcage.plots.style import Drawing, Missing, settle, styled
from trajcage.store import Result
from trajcage.wording import near_miss

__all__ = ["FIGURES", "Figures", "draw_figures"]

#: How each figure is drawn, in the order of a report.
FIGURES: Mapping[str, Callable[[Facts], Drawing | Missing]] = MappingProxyType(
    {
        "free-volume": free_volume,
        "lattices": lattices,
        "pressure": pressure,
        "windows": windows,
        "slice": slices,
        "regions": regions,
        "survival": survival,
        "correlations": correlations,
        "rattlers": rattlers,
    }
)


@dataclass(frozen=True, eq=False)
class Figures:
    """Figures of one result file.

    Parameters
    ----------
    drawn : dict of str to Drawing
        By name.
    missing : dict of str to str
        Why the others could not be drawn, by name.
    """

    drawn: dict[str, Drawing]
    missing: dict[str, str]


def draw_figures(
    result: Result, names: Iterable[str] = (), *, frame: int | None = None
) -> Figures:
    """Draw figures of a result file; those without data are left out with a reason.

    Parameters
    ----------
    result : Result
        An open result file.
    names : iterable of str
        Of :data:`FIGURES`; all unless given.
    frame : int, optional
        Frame of the slice, as numbered in the trajectory; the last one unless given.

    Raises
    ------
    UsageError
        If a figure or the frame is unknown, or no slice of that frame is wanted.
    ResultFileError
        If the file has no summary yet or is damaged.
    """
    chosen = list(names) or list(FIGURES)
    for name in chosen:
        if name not in FIGURES:
            raise UsageError(
                f"there is no figure {name!r}{near_miss(name, FIGURES)}; choose among "
                f"{', '.join(FIGURES)}"
            )
    if frame is not None and "slice" not in chosen:
        raise UsageError(
            f"frame {frame} is that of the slice, which is not among the figures chosen: "
            f"{', '.join(chosen)}"
        )
    facts = Facts(result, frame)
    drawn: dict[str, Drawing] = {}
    missing: dict[str, str] = {}
    with styled():
        for name in chosen:
            made = FIGURES[name](facts)
            if isinstance(made, Missing):
                missing[name] = made.reason
            else:
                settle(made.figure)
                drawn[name] = made
    return Figures(drawn, missing)
