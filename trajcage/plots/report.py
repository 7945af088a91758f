"""One page with everything: warnings, numbers, figures, options, origins."""

from pathlib import Path
from typing import Any

from trajcage.errors import ResultFileError
from trajcage.plots.catalog import Figures, draw_figures
from trajcage.plots.facts import Facts
from trajcage.plots.page import bullets, image, page, section, table
from trajcage.plots.saving import figure_bytes
from trajcage.plots.style import Drawing
from trajcage.store import Result
from trajcage.wording import MISSING, number, with_error

__all__ = ["report_page", "write_report"]

_LARGEST_SVG = 300_000  # bytes; larger figures are embedded as PNG
_DOTS = 140.0  # an inch, of those


def write_report(
    result: Result,
    file: str | Path,
    *,
    frame: int | None = None,
    overwrite: bool = False,
) -> Figures:
    """Write a result file as one self-contained HTML page.

    Parameters
    ----------
    result : Result
        An open result file.
    file : path
        Where to.
    frame : int, optional
        Frame of the slice, as numbered in the trajectory; the last one unless given.
    overwrite : bool
        Whether to replace a file that is there.

    Returns
    -------
    Figures
        The figures of the page, and why others are not in it.

    Raises
    ------
    ResultFileError
        If the file is in the way, cannot be written, or the result cannot be used.
    UsageError
        If there is no such frame.
    """
    target = Path(file)
    if target.exists() and not overwrite:
        raise ResultFileError(
            f"{target} exists; replace it with --overwrite, or choose another name"
        )
    figures = draw_figures(result, frame=frame)
    try:
        target.write_text(report_page(result, figures), encoding="utf-8")
    except OSError as error:
        raise ResultFileError(f"cannot write {target}: {error.strerror}") from error
    return figures


def report_page(result: Result, figures: Figures) -> str:
    """Return the HTML page of a result file and its figures."""
    facts = Facts(result)
    parameters = facts.parameters
    source = parameters["input"]
    frames = f"{facts.n_frames} frames of {facts.n_particles} particles"
    warnings = _warnings(facts, figures)
    parts = [
        section("Warnings", bullets(warnings), kind="warnings")
        if warnings
        else section("Warnings", "<p>None.</p>"),
        section("What was measured", table(_measured(facts))),
        section(
            "Figures",
            "\n".join(_figure(name, drawn) for name, drawn in figures.drawn.items()),
        ),
        section("Means over all frames", _observables(facts)),
        section("Equations of state", _equations(facts)),
        section("Ideal lattices at this packing fraction", _lattices(facts)),
        section("In time", _times(facts)),
        section(
            "Options",
            table([(k, _plain(v)) for k, v in sorted(parameters["options"].items())]),
            folded=True,
        ),
        section("Where it comes from", table(_origin(parameters)), folded=True),
    ]
    names = ", ".join(Path(name).name for name in source["files"])
    return page(f"Cages in {names}", f"{frames}; {result.path.name}", parts)


def _warnings(facts: Facts, figures: Figures) -> list[str]:
    """Collect everything that a reader must know before the numbers."""
    found: list[str] = []
    result, summary = facts.result, facts.summary
    if not result.complete:
        found.append(
            "The run is not complete: it was interrupted or is still being measured. "
            f"Numbers and figures are those of the first {facts.n_frames} frames."
        )
    cages = summary["cages"]
    if cages["closed"] < sum(cages.values()):
        found.append(facts.left_out() + " No mean over cages contains them.")
    observables = summary["observables"]
    overlapping = observables["overlaps"]["mean"]
    if overlapping:
        found.append(
            f"{number(overlapping)} pairs a frame overlap by more than the tolerance."
        )
    factor = observables["compressibility_factor"]
    if factor["n_values"] == 0:
        found.append(f"The compressibility factor is missing: {factor['reason']}.")
    elif factor["n_missing"]:
        found.append(
            f"The compressibility factor is missing on {factor['n_missing']} frames: "
            "they are left out of its mean."
        )
    bounds = [
        name
        for name, entry in observables.items()
        if entry["error"] and not entry["converged"]
    ]
    if bounds:
        found.append(
            "Errors are lower bounds, too few frames for independent blocks: "
            f"{', '.join(bounds)}."
        )
    found += [str(note) for note in facts.parameters["notes"]]
    found += [str(note) for note in facts.parameters["input"]["notes"]]
    found += [f"No figure {name}: {why}." for name, why in figures.missing.items()]
    return list(dict.fromkeys(found))  # notes may stand in both lists


def _measured(facts: Facts) -> list[tuple[str, str]]:
    source, result = facts.parameters["input"], facts.result
    box = " × ".join(number(x) for x in source["box_lengths"])
    axes = "".join(a for a, p in zip("xyz", result.periodic, strict=False) if p)
    edges = f"periodic along {axes or 'no edge'}"
    first, last = (number(facts.times[k]) for k in (0, -1))
    span = f"time {first} to {last} {facts.time_unit}"
    cages = ", ".join(f"{n} {name}" for name, n in facts.summary["cages"].items() if n)
    species = ", ".join(f"{n} of {name}" for name, n in source["species"].items())
    return [
        ("input", f"{', '.join(source['files'])} ({source['format']})"),
        ("particles", f"{facts.n_particles}: {species}"),
        ("dimensions", f"{facts.dimensions}. {source['dimensions_source']}"),
        (
            "frames",
            f"{facts.n_frames}, {span}. {source['time_source']}",
        ),
        (
            "box",
            f"{box}, {edges}. {source['box_source']} {source['periodic_source']}",
        ),
        (
            "radii",
            f"mean diameter D = {number(facts.diameter)}. {source['radii_source']}",
        ),
        ("resolution of a coordinate", number(source["resolution"], 3)),
        ("cages over all frames", cages),
    ]


def _observables(facts: Facts) -> str:
    fields, rows = facts.result.fields, []
    for name, entry in facts.summary["observables"].items():
        mean = with_error(entry["mean"], entry["error"])
        note = entry["reason"]
        missing = str(entry["n_missing"]) if entry["n_missing"] else ""
        field = fields[name]
        unit = field.unit.replace("length", "D").replace("+1", "").replace("+", "^")
        rows.append(
            (name, mean, "" if unit == "1" else unit, missing, field.description, note)
        )
    header = ("", "mean ± error", "unit", "frames left out", "what it is", "note")
    return "<p>Lengths in mean diameters D; blocking errors.</p>" + table(rows, header)


def _equations(facts: Facts) -> str:
    rows = [
        (
            f"{row['name']} ({row['phase']}, {row['structure']})",
            number(row["compressibility_factor"]),
            _signed(row["deviation"], 3),
            _signed(row["deviation_in_errors"], 2),
            row["source"],
        )
        for row in facts.summary["equations_of_state"]
    ]
    if not rows:
        return "<p>None holds at this packing fraction.</p>"
    header = ("", "Z", "measured − Z", "in errors", "source")
    return table(rows, header)


def _lattices(facts: Facts) -> str:
    rows = [
        (
            row["name"],
            row["cage_status"],
            number(row["free_volume"]),
            number(row["free_volume_ratio"], 4),
            str(row["bounding_neighbors"]),
            number(row["weakest_window"], 4),
            number(row["compressibility_factor"]),
        )
        for row in facts.summary["lattices"]
    ]
    if not rows:
        return "<p>None exists at this packing fraction.</p>"
    header = (
        "",
        "cage",
        f"free {facts.volume}",
        "measured mean / lattice",
        "bounding neighbors",
        "weakest window",
        "Z of the cell theory",
    )
    return table(rows, header)


def _times(facts: Facts) -> str:
    missing = facts.lacks("time", "cage breaking")
    if missing is not None:
        return bullets([missing.reason])
    reasons = facts.summary["time_reasons"]
    rows = [
        (name, number(value), reasons.get(name, ""))
        for name, value in facts.summary["time"].items()
    ]
    lead = bullets([f"Lengths in mean diameters, times in units of {facts.time_unit}."])
    return lead + table(rows, ("", "value", "why it is missing"))


def _figure(name: str, drawing: Drawing) -> str:
    """Embed a figure as SVG, as PNG where that would be large."""
    form, data = "svg", figure_bytes(drawing, "svg")
    if len(data) > _LARGEST_SVG:
        form, data = "png", figure_bytes(drawing, "png", _DOTS)
    return image(name, form, data, f"{drawing.title}. {drawing.caption}")


def _origin(parameters: dict[str, Any]) -> list[tuple[str, str]]:
    return [
        ("command", str(parameters["command_line"])),
        *(
            (str(entry["name"]), f"{entry['size']} bytes, sha256 {entry['sha256']}")
            for entry in parameters["inputs"]
        ),
        *((name, str(version)) for name, version in parameters["versions"].items()),
        ("platform", str(parameters["platform"])),
    ]


def _signed(value: float | None, digits: int) -> str:
    return MISSING if value is None else f"{value:+.{digits}g}"


def _plain(value: object) -> str:
    """Write an option."""
    if value is None:
        return "not given"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return number(value)
    if isinstance(value, (list, tuple)):
        return ", ".join(_plain(item) for item in value) or "none"
    return str(value)
