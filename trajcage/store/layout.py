"""The complete structure of a result file, made before the first frame.

Nothing but rows is added afterwards: that is what allows one writer beside
many readers, and what makes every later state of the file readable.
"""

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

import trajcage
from trajcage.errors import UsageError
from trajcage.model import Field
from trajcage.store.commit import FORMAT_VERSION, Commit
from trajcage.store.specs import (
    ArraySpec,
    TableSpec,
    check_fields,
    fill_value,
    resolve_unit,
)

__all__ = ["Layout", "counted_names", "image", "position_field"]

_CHUNK_VALUES = 131_072  # 1 MiB of float64
_ATTRIBUTE_LIMIT = 32_768  # bytes; longer parameters stand in the document only
_CELL = {"frame": 256, "row": 1024}


@dataclass(frozen=True, eq=False)
class Layout:
    """Everything that shapes the file; see :meth:`ResultWriter.create`."""

    fields: Sequence[Field]
    tables: Sequence[TableSpec]
    arrays: Sequence[ArraySpec]
    n_particles: int
    dimensions: int
    periodic: Sequence[bool]
    ids: NDArray[np.int64]
    species: NDArray[np.int32]
    type_names: Sequence[str]
    radii: NDArray[np.float64]
    length_unit: str
    time_unit: str

    def __post_init__(self) -> None:
        check_fields(self.fields)
        n, d = self.n_particles, self.dimensions
        if d not in {2, 3} or len(self.periodic) != d or n < 1:
            raise UsageError(
                f"expected particles in 2 or 3 dimensions with one boundary flag each, "
                f"got n_particles={n}, dimensions={d}, periodic={self.periodic}"
            )
        for name in ("ids", "species", "radii"):
            if np.shape(getattr(self, name)) != (n,):
                shape = np.shape(getattr(self, name))
                raise UsageError(f"{name}: expected shape ({n},), got {shape}")
        paths = [t.path for t in self.tables] + [a.path for a in self.arrays]
        for path in paths:
            if any(other.startswith(f"{path}/") for other in paths):
                raise UsageError(f"{path} is declared as a dataset and as a group")
            if paths.count(path) > 1:
                raise UsageError(f"{path} is declared twice")

    def unit(self, unit: str) -> str:
        """Resolve a unit to the symbols of this run."""
        return resolve_unit(unit, self.length_unit, self.time_unit)


def position_field(dimensions: int) -> Field:
    """Return the declaration of stored positions."""
    return Field(
        "position", "Center of the particle.", unit="length", shape=(dimensions,)
    )


def counted_names(
    tables: Sequence[TableSpec], arrays: Sequence[ArraySpec]
) -> tuple[str, ...]:
    """Names of everything whose rows stand in the commit record."""
    names: list[str] = []
    for table in tables:
        names += [table.name, *(f"{table.name}/{f.name}" for f in table.ragged)]
    return (*names, *(array.name for array in arrays if array.values is None))


def _text(value: str) -> np.ndarray[Any, Any]:
    data = value.encode()
    return np.array(data, dtype=h5py.string_dtype("utf-8", max(len(data), 1)))


def _label(item: Any, **attributes: str) -> None:
    for name, value in attributes.items():
        item.attrs[name] = _text(value)


def _growing(
    group: Any, name: str, shape: tuple[int, ...], dtype: str, *, chunk: int
) -> Any:
    """Create an empty dataset that grows along its first axis."""
    kind = np.dtype(dtype)
    trailing = max(int(np.prod(shape)), 1)
    return group.create_dataset(
        name,
        shape=(0, *shape),
        maxshape=(None, *shape),
        chunks=(
            max(1, min(chunk, _CHUNK_VALUES // trailing)),
            *(max(s, 1) for s in shape),
        ),
        dtype=kind,
        fillvalue=fill_value(kind),
    )


def _particle_dataset(group: Any, field: Field, n_particles: int) -> Any:
    kind = np.dtype(field.dtype)
    trailing = max(int(np.prod(field.shape)), 1)
    width = max(1, min(n_particles, _CHUNK_VALUES // trailing))
    packed = {"compression": "gzip", "compression_opts": 1, "shuffle": True}
    return group.create_dataset(
        "value",
        shape=(0, n_particles, *field.shape),
        maxshape=(None, n_particles, *field.shape),
        chunks=(1, width, *field.shape),
        dtype=kind,
        fillvalue=fill_value(kind),
        **({} if kind.kind == "f" else packed),
    )


def _describe_field(dataset: Any, field: Field, layout: Layout) -> None:
    _label(dataset, description=field.description)
    if field.name != "position":  # MDAnalysis refuses units that it does not know
        _label(dataset, unit=layout.unit(field.unit))
    if field.codes:  # as in the CF conventions, section 3.5
        dataset.attrs["flag_values"] = np.arange(len(field.codes), dtype=field.dtype)
        _label(dataset, flag_meanings=" ".join(field.codes))


def image(layout: Layout, parameters: Mapping[str, object]) -> bytes:
    """Return the bytes of a new file with all groups, datasets and attributes."""
    with h5py.File(
        "image", "w", driver="core", backing_store=False, libver=("v110", "v110")
    ) as file:
        _build(file, layout, parameters)
        file.flush()
        return bytes(file.id.get_file_image())


def _build(file: Any, layout: Layout, parameters: Mapping[str, object]) -> None:
    _build_h5md(file, layout)
    _build_frames(file, layout)
    root = file["trajcage"]
    for table in layout.tables:
        _build_table(root, table, layout)
    for array in layout.arrays:
        _build_array(root, array, layout)
    _build_bookkeeping(root, layout)
    _build_parameters(file, parameters)


def _build_h5md(file: Any, layout: Layout) -> None:
    h5md = file.create_group("h5md")
    h5md.attrs["version"] = np.array([1, 1], dtype=np.int32)
    _label(h5md.create_group("author"), name="unknown")
    _label(h5md.create_group("creator"), name="trajcage", version=trajcage.__version__)
    units = h5md.create_group("modules/units")
    units.attrs["version"] = np.array([1, 0], dtype=np.int32)
    si = {"m", "mm", "um", "nm", "s", "ms", "us", "ns", "ps"}
    given = {layout.length_unit, layout.time_unit}
    _label(units, system="SI" if given <= si else "reduced")


def _build_frames(file: Any, layout: Layout) -> None:
    d, n = layout.dimensions, layout.n_particles
    particles = file.create_group("particles/all")
    observables = file.create_group("observables")
    box = particles.create_group("box")
    box.attrs["dimension"] = np.int32(d)
    boundary = [b"periodic" if p else b"none" for p in layout.periodic]
    box.attrs["boundary"] = np.array(boundary, dtype="S8")

    edges = box.create_group("edges")
    step = _growing(edges, "step", (), "i8", chunk=_CELL["frame"])
    time = _growing(edges, "time", (), "f8", chunk=_CELL["frame"])
    value = _growing(edges, "value", (d, d), "f8", chunk=_CELL["frame"])
    _label(step, description="Simulation step of the frame.")
    _label(time, description="Time of the frame; unit: /parameters/trajcage.")
    _label(value, description="Edge vectors of the box as rows.")

    for field in layout.fields:
        group = (particles if field.per_particle else observables).create_group(
            field.name
        )
        if field.per_particle:
            dataset = _particle_dataset(group, field, n)
        else:
            dataset = _growing(
                group, "value", field.shape, field.dtype, chunk=_CELL["frame"]
            )
        _describe_field(dataset, field, layout)
        group["step"] = step
        group["time"] = time

    ids = particles.create_dataset("id", data=np.asarray(layout.ids, np.int64))
    _label(ids, description="Particle id in the source.", unit="1")
    species = particles.create_dataset(
        "species", data=np.asarray(layout.species, np.int32)
    )
    _label(species, description="Type index of the particle.", unit="1")
    _label(species, type_names=json.dumps(list(layout.type_names)))
    if "radius" not in {f.name for f in layout.fields if f.per_particle}:
        radius = particles.create_dataset(
            "radius", data=np.asarray(layout.radii, np.float64)
        )
        _label(radius, description="Hard-sphere radius.", unit=layout.unit("length"))

    frames = file.create_group("trajcage/frames")
    source = _growing(frames, "source_frame", (), "i8", chunk=_CELL["frame"])
    _label(source, description="Frame number in the source, from 0.", unit="1")
    origin = _growing(frames, "box_origin", (d,), "f8", chunk=_CELL["frame"])
    _label(origin, description="Corner of the box.", unit=layout.unit("length"))
    names = counted_names(layout.tables, ())
    if names:
        rows = _growing(frames, "table_rows", (len(names),), "i8", chunk=_CELL["frame"])
        _label(rows, description="Rows of each table up to and including this frame.")
        _label(rows, unit="1", columns="\n".join(names))


def _build_table(root: Any, table: TableSpec, layout: Layout) -> None:
    group = root.create_group(table.name)
    _label(group, kind="table", description=table.description)
    for field in table.columns:
        column = _growing(
            group, field.name, field.shape, field.dtype, chunk=_CELL["row"]
        )
        _label(column, kind="column")
        _describe_field(column, field, layout)
    for field in table.ragged:
        values = _growing(
            group, field.name, field.shape, field.dtype, chunk=_CELL["row"]
        )
        _label(values, kind="ragged")
        _describe_field(values, field, layout)
        offsets = _growing(group, f"{field.name}_offsets", (), "i8", chunk=_CELL["row"])
        offsets.resize(1, axis=0)
        offsets[0] = 0
        _label(offsets, kind="offsets", unit="1")
        _label(offsets, description=f"Where each row starts in {field.name}.")


def _build_array(root: Any, spec: ArraySpec, layout: Layout) -> None:
    if spec.values is not None:
        values = np.asarray(spec.values).astype(spec.dtype)
        dataset = root.create_dataset(spec.name, data=values)
        _label(dataset, kind="static")
    elif not spec.shape:
        kind = np.dtype(spec.dtype)
        dataset = root.create_dataset(
            spec.name, data=np.array(fill_value(kind), dtype=kind)
        )
        _label(dataset, kind="scalar")
    else:
        trailing = tuple(int(s) for s in spec.shape[1:] if s is not None)
        chunk = spec.shape[0] or _CELL["row"]
        dataset = _growing(root, spec.name, trailing, spec.dtype, chunk=chunk)
        _label(dataset, kind="array")
    _label(dataset, description=spec.description, unit=layout.unit(spec.unit))


def _build_bookkeeping(root: Any, layout: Layout) -> None:
    version = root.create_dataset("format_version", data=np.int64(FORMAT_VERSION))
    _label(version, description="Version of the layout below /trajcage.", unit="1")
    commit = Commit.initial(counted_names(layout.tables, layout.arrays))
    row = commit.encode()
    table = root.create_dataset("commit", data=np.stack([row, np.zeros_like(row)]))
    _label(
        table,
        description="How far the file is. Two rows written in turn: the one of "
        "the later generation with a right checksum (crc32 of the rest) counts.",
        unit="1",
        columns="\n".join(commit.columns),
    )
    counter = root.create_dataset("frames_complete", data=np.int64(0))
    _label(
        counter,
        description="Frames that are valid. Written last: rows beyond it mean nothing.",
        unit="1",
    )
    complete = root.create_dataset("complete", data=np.int64(0))
    _label(complete, description="1 once the run has finished.", unit="1")
    summary = _growing(root, "summary", (), "u1", chunk=4096)
    _label(summary, description="Summary of the run, JSON in UTF-8 bytes.", unit="1")
    state = root.create_group("state")
    for slot in "ab":
        data = _growing(state, slot, (), "u1", chunk=65_536)
        _label(data, description="State that resuming needs, own framing.", unit="1")


def _build_parameters(file: Any, parameters: Mapping[str, object]) -> None:
    group = file.create_group("parameters/trajcage")
    document = json.dumps(parameters, indent=1, sort_keys=True)
    dataset = group.create_dataset("document", data=_text(document))
    _label(dataset, description="All parameters of the run, JSON.", unit="1")
    for name, value in parameters.items():
        text = value if isinstance(value, str) else json.dumps(value, sort_keys=True)
        if 0 < len(text.encode()) <= _ATTRIBUTE_LIMIT:
            _label(group, **{name: text})
