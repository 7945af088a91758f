"""Write every option and every dataset into README.md.

python scripts/readme_reference.py

Help texts and descriptions of fields are the only source; the tests check that the README
holds what this makes of them.
"""

import re
from collections.abc import Callable, Iterator
from functools import partial
from pathlib import Path

import click

from trajcage.analysis.conclusion import SUMMARY
from trajcage.cli import main
from trajcage.lattices import LATTICES
from trajcage.run import RunSettings

ROOT = Path(__file__).parents[1]
BEGIN = "<!-- written by scripts/readme_reference.py -->"
END = "<!-- end -->"

_VERBOSITY = {"verbose", "quiet"}
_OWN = {"overlap_tolerance", "as_json"}  # those of inspect itself
_LATTICE = re.compile(rf"lattice_({'|'.join(LATTICES)})_")
_STORED = RunSettings(store_positions=True, store_walls=True, varying_radii=True)


def reference() -> str:
    """Return all commands, options and datasets as Markdown."""
    parts = ["## Every option", *_commands(), "## Every dataset", *_datasets()]
    return "\n\n".join(parts)


def commands() -> dict[str, click.Command]:
    """Return all commands by name."""
    context = click.Context(main, info_name="trajcage")
    found = {
        name: main.get_command(context, name) for name in main.list_commands(context)
    }
    return {name: command for name, command in found.items() if command is not None}


def options(command: click.Command) -> list[click.Option]:
    """Return the options of a command, but for --help, which all have."""
    return [p for p in command.params if isinstance(p, click.Option)]


def _commands() -> Iterator[str]:
    inputs = options(commands()["inspect"])
    shared = {o.name: o.opts[0] for o in inputs if o.name not in _OWN | _VERBOSITY}
    yield (
        "Every command has `-h, --help`, `-v, --verbose` (log what is read and chosen, and "
        "timings) and `-q, --quiet` (print errors only). `trajcage --version` shows the "
        "versions of trajcage and of what it stands on."
    )
    for name, command in commands().items():
        context = click.Context(command, info_name=f"trajcage {name}")
        usage = " ".join(command.collect_usage_pieces(context))
        lines = [f"### trajcage {name}", "", f"`trajcage {name} {usage}`"]
        own = [o for o in options(command) if o.name not in _VERBOSITY]
        if name != "inspect" and shared.keys() <= {o.name for o in own}:
            own = [o for o in own if o.name not in shared]
            names = ", ".join(f"`{name}`" for name in shared.values())
            lines[-1] += f", with {names} as for `trajcage inspect`, and"
        if own:
            lines += ["", "| option | |", "|---|---|"]
        for option in own:
            names, told = option.get_help_record(context) or ("", "")
            lines.append(f"| `{_cell(names)}` | {_cell(told.replace('  [', ' ['))} |")
        yield "\n".join(lines)


_Rows = dict[str, tuple[str, str]]  # unit and description by name


def _datasets() -> Iterator[str]:
    yield (
        "`length` is the unit of length of the input, `time` that of time, d the number "
        "of dimensions."
    )
    for title, rows in (
        ("For each particle and frame, `/particles/all/<name>/value`", _fields(True)),
        ("For each frame, `/observables/<name>/value`", _fields(False)),
    ):
        yield _table(title, rows)
    for k, table in enumerate(_STORED.tables(3)):
        title = f"Table `{table.path}`: {table.description}"
        yield _table(title, _merged(partial(_columns, k)))
    yield _table("Beside the frames, `/trajcage/<name>`", _merged(_arrays))
    scalars = {f.name: (f.unit, f.description) for f in SUMMARY}
    title = "Scalars in time, `time` in `/trajcage/summary`, lengths in mean diameters"
    yield _table(
        title, {name: (_unit(u, u), told) for name, (u, told) in scalars.items()}
    )


def _fields(per_particle: bool) -> _Rows:
    """Fields by name, those of all lattices under one."""

    def rows(dimensions: int) -> _Rows:
        found: _Rows = {}
        for field in _STORED.fields(dimensions):
            if field.per_particle == per_particle:
                told = field.description.rstrip(".")
                lattice = _LATTICE.match(field.name)
                name = _LATTICE.sub("lattice_<name>_", field.name)
                if lattice:
                    told = re.sub(rf"\b{lattice[1]}\b", "<name>", told)
                found.setdefault(name, (field.unit, told))
        return found

    return _merged(rows)


def _columns(k: int, dimensions: int) -> _Rows:
    table = _STORED.tables(dimensions)[k]
    return {f.name: (f.unit, f.description) for f in (*table.columns, *table.ragged)}


def _arrays(dimensions: int) -> _Rows:
    found = _STORED.arrays(dimensions, 1.0)
    return {a.path.removeprefix("/trajcage/"): (a.unit, a.description) for a in found}


def _merged(rows: Callable[[int], _Rows]) -> _Rows:
    """Put what both dimensions have into one."""
    space, plane = rows(3), rows(2)
    merged = {}
    for name in {**space, **plane}:
        unit, told = space.get(name) or plane[name]
        if name not in plane:
            told += " (3D)"
        elif name not in space:
            told += " (2D)"
        merged[name] = _unit(unit, plane.get(name, (unit, ""))[0]), told
    return merged


def _unit(space: str, plane: str) -> str:
    """Write a unit; d where the power follows the dimensions."""
    powers = {"length+3": "length^d", "length+2": "length^(d−1)"}
    if space != plane:
        return powers[space]
    return "" if space == "1" else re.sub(r"([a-z])\+?(-?\d)", r"\1^\2", space)


def _table(title: str, rows: _Rows) -> str:
    lines = [f"### {title}", "", "| name | unit | |", "|---|---|---|"]
    lines += [
        f"| `{name}` | {unit} | {_cell(told)} |" for name, (unit, told) in rows.items()
    ]
    return "\n".join(lines)


def _cell(text: str) -> str:
    return text.replace("|", "\\|")


def with_reference(text: str) -> str:
    """Return the README with a fresh reference."""
    head, _, rest = text.partition(BEGIN)
    _, _, tail = rest.partition(END)
    return f"{head}{BEGIN}\n\n{reference()}\n\n{END}{tail}"


if __name__ == "__main__":
    readme = ROOT / "README.md"
    text = with_reference(readme.read_text(encoding="utf-8"))
    readme.write_text(text, encoding="utf-8")
