"""What a run measures: families of quantities and what they store."""

import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field
from typing import Any

from trajcage.analysis import (
    cages,
    cells,
    contacts,
    fold,
    order,
    regions,
    thermodynamics,
)
from trajcage.analysis.cages import CageOptions
from trajcage.analysis.conclusion import CURVE_ARRAYS
from trajcage.analysis.contacts import ContactOptions
from trajcage.analysis.distributions import distribution_arrays
from trajcage.analysis.order import OrderOptions
from trajcage.analysis.regions import Region, RegionOptions
from trajcage.analysis.time_options import TimeOptions
from trajcage.errors import UsageError
from trajcage.model import Field
from trajcage.run.provenance import under
from trajcage.store import ArraySpec, TableSpec
from trajcage.wording import near_miss

__all__ = ["FAMILIES", "RunSettings"]

#: Families of quantities that can be left out, with the families they build on.
FAMILIES: dict[str, tuple[str, ...]] = {
    "cells": (),
    "order": ("cells",),
    "rattlers": (),
    "regions": ("order",),
    "time": (),
}

_RADIUS = Field("radius", "Hard-sphere radius of the particle.", "length")
_REGION_ID = Field(
    "region_id",
    "Lasting id of the connected region that the particle is part of, as in the table "
    "regions; -1 if that is too small to be listed",
    dtype="i8",
)


@dataclass(frozen=True)
class RunSettings:
    """How every frame is measured; instances pickle.

    Parameters
    ----------
    skip : collection of str
        Families of :data:`FAMILIES` to leave out; those that build on them are left
        out too.
    varying_radii : bool
        Whether radii are stored for each frame.
    store_positions : bool
        Whether positions are stored.
    store_walls : bool
        Whether it is stored by whom each particle is caged.
    cages, order, contacts, regions, time
        Options of the parts.

    Raises
    ------
    UsageError
        If a family is unknown.
    """

    skip: Collection[str] = ()
    varying_radii: bool = False
    store_positions: bool = False
    store_walls: bool = False
    cages: CageOptions = field(default_factory=CageOptions)
    order: OrderOptions = field(default_factory=OrderOptions)
    contacts: ContactOptions = field(default_factory=ContactOptions)
    regions: RegionOptions = field(default_factory=RegionOptions)
    time: TimeOptions = field(default_factory=TimeOptions)

    def __post_init__(self) -> None:
        left_out = set(self.skip)
        for name in self.skip:
            if name not in FAMILIES:
                raise UsageError(
                    f"there is no family {name!r} to skip{near_miss(name, FAMILIES)}; "
                    f"choose among {', '.join(FAMILIES)}"
                )
        for name, needed in FAMILIES.items():  # in an order that carries on
            if left_out.intersection(needed):
                left_out.add(name)
        object.__setattr__(self, "skip", tuple(sorted(left_out)))

    @classmethod
    def recorded(cls, options: Mapping[str, Any]) -> "RunSettings":
        """Return the settings of the run that recorded these options.

        Parameters
        ----------
        options : dict
            From a result file, flat.
        """

        def family(name: str) -> dict[str, Any]:
            return {
                k: tuple(v) if isinstance(v, list) else math.inf if v == "inf" else v
                for k, v in under(name, options).items()
            }

        return cls(
            skip=tuple(options["skip"]),
            varying_radii=options["varying_radii"],
            store_positions=options["store_positions"],
            store_walls=options["store_walls"],
            cages=CageOptions(**family("cages")),
            order=OrderOptions(**family("order")),
            contacts=ContactOptions(**family("contacts")),
            regions=RegionOptions(**family("regions")),
            time=TimeOptions(**family("time")),
        )

    def has(self, family: str) -> bool:
        """Whether a family is measured."""
        return family not in self.skip

    def fields(self, dimensions: int) -> tuple[Field, ...]:
        """Quantities of every frame."""
        d = dimensions
        declared = [*cages.fields(d), *thermodynamics.fields(d)]
        if self.has("cells"):
            declared += cells.fields(d)
        if self.has("order"):
            declared += order.fields(d)
        if self.has("rattlers"):
            declared += contacts.fields(self.contacts)
        if self.has("regions"):
            declared += [*regions.FIELDS, _REGION_ID]
        if self.has("time"):
            declared += fold.FIELDS
        if self.varying_radii:
            declared.append(_RADIUS)
        return tuple(declared)

    def tables(self, dimensions: int) -> tuple[TableSpec, ...]:
        """Tables that grow with the frames."""
        declared: list[TableSpec] = []
        if self.has("time"):
            declared += fold.growing_tables(dimensions)
        if self.has("regions"):
            declared.append(_region_table(dimensions))
        if self.store_walls:
            declared.append(_wall_table(dimensions))
        return tuple(declared)

    def arrays(self, dimensions: int, mean_diameter: float) -> tuple[ArraySpec, ...]:
        """Arrays beside the frames."""
        declared = [*distribution_arrays(dimensions, mean_diameter)]
        if self.has("time"):
            declared += CURVE_ARRAYS
        return tuple(declared)


def _region_table(dimensions: int) -> TableSpec:
    d = dimensions
    kinds = ", ".join(f"{code.value} {code.name.lower()}" for code in Region)

    def column(
        name: str, description: str, unit: str = "1", dtype: str = "f8", size: int = 0
    ) -> Field:
        shape = (size,) if size else ()
        return Field(name, description, unit, dtype, False, shape)

    columns = (
        column("frame", "Source frame", dtype="i8"),
        column("step", "Simulation step of the frame", dtype="i8"),
        column("time", "Time of the frame", "time"),
        column("region_id", "Lasting id of the region", dtype="i8"),
        column("kind", f"Region: {kinds}", dtype="u1"),
        column("size", "Number of particles", dtype="i8"),
        column(
            "center",
            "Center of the particles; NaN along edges that the region winds around",
            "length",
            size=d,
        ),
        column("free_volume_mean", "Mean free volume", f"length+{d}"),
        column("free_volume_count", "Closed cages in that mean", dtype="i8"),
        column("local_packing_fraction_mean", "Mean local packing fraction"),
        column("local_packing_fraction_count", "Particles in that mean", dtype="i8"),
        column("weakest_window_mean", "Mean weakest opening ratio"),
        column("weakest_window_count", "Closed cages in that mean", dtype="i8"),
    )
    return TableSpec(
        "/trajcage/regions",
        columns,
        description="Connected regions of crystal, glass and fluid, largest first",
    )


def _wall_table(dimensions: int) -> TableSpec:
    columns = (
        Field("frame", "Source frame", "1", "i8", False),
        Field("particle", "Index of the particle in the cage", "1", "i8", False),
    )
    ragged = (
        Field("neighbors", "Indices of the bounding neighbors", "1", "i4", False),
        Field(
            "areas",
            "Wall area (length in 2D) on the exclusion sphere of each",
            f"length+{dimensions - 1}",
            "f8",
            False,
        ),
    )
    return TableSpec(
        "/trajcage/walls", columns, ragged, "By whom each particle is caged"
    )
