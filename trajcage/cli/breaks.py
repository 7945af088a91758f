"""The command that lists the cages that broke."""

import csv
import sys
from typing import TYPE_CHECKING, Any

import click

from trajcage.cli.common import print_json, result_argument, table
from trajcage.cli.verbosity import verbosity_options
from trajcage.wording import MISSING, number

if TYPE_CHECKING:
    from trajcage.store import Result

__all__ = ["command"]


@click.command(name="breaks")
@result_argument
@click.option("--csv", "as_csv", is_flag=True, help="Print all events as CSV.")
@click.option("--json", "as_json", is_flag=True, help="Print all events as JSON.")
@click.option(
    "--limit",
    type=click.IntRange(min=0),
    metavar="N",
    default=20,
    show_default=True,
    help="Events to show as text.",
)
@verbosity_options
def command(*, result: Any, as_csv: bool, as_json: bool, limit: int) -> None:
    """List the cages that broke: who, when, how far, and which neighbors were lost.

    A cage is broken when a set share of the neighbors at its start is gone. Ids are
    those of the input; times are in the time unit of the file, lengths in its unit of
    length.
    """
    from trajcage.errors import ResultFileError, UsageError
    from trajcage.store import open_result

    if as_csv and as_json:
        raise UsageError("--csv and --json are two forms of the same: give one")
    with open_result(result) as opened:
        if "events" not in opened.tables:
            raise ResultFileError(
                f"{result} holds no cage breaking: it was measured with --skip time"
            )
        events = _events(opened)
        header = _header(opened)
        n_particles, n_frames = opened.n_particles, opened.frames_complete
    if as_json:
        print_json(events)
    elif as_csv:
        _write_csv(events, header)
    else:
        click.echo(_text(events[:limit], len(events), n_particles, n_frames))


def _events(opened: "Result") -> list[dict[str, Any]]:
    """Events as rows with ids in place of indices and codes by name."""
    regions = opened["region"].codes if "region" in opened else ()
    columns = opened.table("events")
    ids = opened.ids
    rows = []
    for k in range(len(columns["particle"])):
        row: dict[str, Any] = {}
        for name, values in columns.items():
            if name.endswith("_offsets"):
                continue
            if f"{name}_offsets" in columns:
                start, stop = (int(i) for i in columns[f"{name}_offsets"][k : k + 2])
                row[name] = ids[values[start:stop]].tolist()
            elif name == "particle":
                row["id"] = int(ids[values[k]])
            elif name.startswith("region_"):
                code = int(values[k])
                row[name] = regions[code] if code < len(regions) else "unknown"
            else:
                row[name] = values[k].tolist()
        rows.append(row)
    return rows


def _header(opened: "Result") -> list[str]:
    """Columns of the CSV, which are there without any event, too."""
    header: list[str] = []
    for name in opened.table("events"):
        if name == "displacement":
            header += [f"{name}_{axis}" for axis in "xyz"[: opened.dimensions]]
        elif not name.endswith("_offsets"):
            header.append("id" if name == "particle" else name)
    return header


def _write_csv(events: list[dict[str, Any]], header: list[str]) -> None:
    writer = csv.writer(sys.stdout, lineterminator="\n")
    writer.writerow(header)
    for event in events:
        cells: list[object] = []
        for name, value in event.items():
            if name == "displacement":
                cells += value
            else:
                cells.append(
                    " ".join(map(str, value)) if isinstance(value, list) else value
                )
        writer.writerow(cells)


def _text(
    events: list[dict[str, Any]], total: int, n_particles: int, n_frames: int
) -> str:
    head = f"{total} cages broke among {n_particles} particles in {n_frames} frames"
    if not events:
        return head
    rows = [
        (
            str(event["id"]),
            ("before " if event["from_record_start"] else "")
            + number(event["start_time"]),
            number(event["end_time"]),
            number(sum(x * x for x in event["displacement"]) ** 0.5, 4),
            f"{len(event['neighbors_lost'])}/{event['n_neighbors_start']}",
            str(len(event["neighbors_gained"])),
            f"{event['region_before']} - {event['region_after']}",
            number(event["weakest_window_before"], 4),
            {1: "yes", 0: "no"}.get(event["through_weakest_window"], MISSING),
        )
        for event in events
    ]
    header = (
        "id",
        "start_time",
        "end_time",
        "displacement",
        "lost",
        "gained",
        "region",
        "weakest_window",
        "through",
    )
    text = f"{head}\n\n{table(rows, header)}"
    if total > len(events):
        text += f"\n... and {total - len(events)} more; --csv lists all"
    return text
