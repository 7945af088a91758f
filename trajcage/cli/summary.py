"""The command that shows the numbers of a result file."""

from typing import Any

import click

from trajcage.cli.common import json_option, print_json, result_argument, table
from trajcage.cli.verbosity import verbosity_options
from trajcage.wording import MISSING, number, with_error

__all__ = ["command"]

# Observables in the order of the text; JSON has all of them.
_SHOWN = (
    "packing_fraction",
    "closed_fraction",
    "free_volume_mean",
    "free_volume_geometric_mean",
    "free_surface_mean",
    "bounding_neighbors_mean",
    "weakest_window_mean",
    "compressibility_factor",
    "reduced_pressure",
    "cell_volume_shape",
    "crystal_fraction",
    "glass_fraction",
    "fluid_fraction",
    "rattler_plateau",
    "broken_fraction",
    "cage_breaks",
    "persisting_fraction",
)


@click.command(name="summary")
@result_argument
@json_option
@click.option(
    "--toml",
    "as_toml",
    is_flag=True,
    help="Print the options of the run instead, for trajcage measure --config.",
)
@verbosity_options
def command(*, result: Any, as_json: bool, as_toml: bool) -> None:
    """Show means with errors beside equations of state and ideal lattices.

    Lengths are in mean diameters. Errors are those of the mean over frames, from
    blocking. FILE may be complete, interrupted, or just being written.
    """
    from trajcage.errors import ResultFileError, UsageError
    from trajcage.store import open_result

    if as_json and as_toml:
        raise UsageError("--json prints the numbers and --toml the options: give one")
    with open_result(result) as opened:
        if as_toml:
            from trajcage.run.configuration import recorded_configuration, to_toml

            click.echo(to_toml(recorded_configuration(opened)))
            return
        summary = opened.summary
        frames, complete = opened.frames_complete, opened.complete
        time_unit = str(opened.parameters["time_unit"])
    if not summary:
        raise ResultFileError(
            f"{result} has {frames} frames but no summary yet; let the run go on, or "
            "continue it with trajcage measure --resume"
        )
    if as_json:
        print_json({"complete": complete, "time_unit": time_unit, **summary})
        return
    blocks = [
        _head(str(result), complete, time_unit, summary),
        _observables(summary),
        _equations(summary),
        _lattices(summary),
        _marks(summary),
        _times(summary, time_unit),
    ]
    click.echo("\n\n".join(block for block in blocks if block))


def _head(path: str, complete: bool, time_unit: str, summary: dict[str, Any]) -> str:
    state = "complete" if complete else "NOT complete"
    cages = ", ".join(f"{n} {name}" for name, n in summary["cages"].items() if n)
    return (
        f"{path}: {summary['n_frames']} frames of {summary['n_particles']} particles in "
        f"{summary['dimensions']}D, {state}\n"
        f"cages over all frames: {cages}\n"
        f"lengths in mean diameters ({number(summary['mean_diameter'])}), times in "
        f"units of {time_unit}"
    )


def _observables(summary: dict[str, Any]) -> str:
    rows, notes = [], []
    for name in _SHOWN:
        found = summary["observables"].get(name)
        if found is None:
            continue
        if found["n_values"] == 0:
            rows.append((name, MISSING))
            notes.append(f"{name}: missing, {found['reason']}")
            continue
        rows.append((name, with_error(found["mean"], found["error"])))
        if found["n_missing"]:
            notes.append(
                f"{name}: not defined on {found['n_missing']} frames, left out"
            )
        elif not found["converged"] and found["error"]:
            rows[-1] = (name, rows[-1][1] + " *")
    text = table(rows, align="left")
    if any(row[1].endswith("*") for row in rows):
        notes.append("* too few frames for an independent error: a lower bound")
    return "\n".join([text, *notes])


def _equations(summary: dict[str, Any]) -> str:
    rows = [
        (
            f"{row['name']} ({row['phase']})",
            number(row["compressibility_factor"]),
            _signed(row["deviation"]),
            _signed(row["deviation_in_errors"], 2),
        )
        for row in summary["equations_of_state"]
    ]
    if not rows:
        return ""
    header = ("equation of state", "Z", "measured - Z", "in errors")
    return table(rows, header)


def _lattices(summary: dict[str, Any]) -> str:
    rows = [
        (
            row["name"],
            row["cage_status"],
            number(row["free_volume"]),
            with_error(row["free_volume_ratio"], row["free_volume_ratio_error"]),
            number(row["free_surface"]),
            with_error(row["free_surface_ratio"], row["free_surface_ratio_error"]),
            str(row["bounding_neighbors"]),
            number(row["weakest_window"], 4),
            number(row["compressibility_factor"]),
        )
        for row in summary["lattices"]
    ]
    if not rows:
        return ""
    header = (
        "ideal lattice",
        "cage",
        "free_volume",
        "measured/lattice",
        "free_surface",
        "measured/lattice",
        "bounding_neighbors",
        "weakest_window",
        "cell theory Z",
    )
    return table(rows, header)


def _marks(summary: dict[str, Any]) -> str:
    marks = ", ".join(
        f"{mark['name']} {mark['packing_fraction']:g}"
        for mark in summary["phase_marks"]
    )
    return f"published packing fractions of equal particles: {marks}"


def _times(summary: dict[str, Any], time_unit: str) -> str:
    if "time" not in summary:
        return ""
    reasons = summary["time_reasons"]
    known = {k: v for k, v in summary["time"].items() if v is not None}
    text = table([(name, number(value)) for name, value in known.items()], align="left")
    missing = [
        f"{name}: missing, {reason}"
        for name, reason in reasons.items()
        if name in summary["time"]
    ]
    return "\n".join([f"in time (unit {time_unit})", text, *missing])


def _signed(value: float | None, digits: int = 3) -> str:
    return MISSING if value is None else f"{value:+.{digits}g}"
