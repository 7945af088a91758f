"""Why an observable has no value on any frame of a run."""

from collections.abc import Mapping

__all__ = ["why_absent"]

_TOO_SHORT = "the record is shorter than the mobility window (--mobility-window)"

_WHY = {
    "rattler_plateau": (
        "the rattler fraction depends on the contact tolerance at every tolerance, as "
        "in thermal configurations"
    ),
    "persisting_fraction": "no particle has a bonded neighbor on the first frame",
    "broken_fraction": _TOO_SHORT,
    "fluid_fraction": _TOO_SHORT,
    "glass_fraction": _TOO_SHORT,
}


def why_absent(
    name: str, *, equal_radii: bool, compressibility: Mapping[str, int]
) -> str:
    """Say why an observable has no value on any frame.

    Parameters
    ----------
    name : str
        The observable.
    equal_radii : bool
        Whether all particles are equal.
    compressibility : dict of str to int
        Frames by their `compressibility_status`.
    """
    if name in {"compressibility_factor", "reduced_pressure"}:
        parts = []
        if n := compressibility["unresolved"]:
            parts.append(f"more than 1 in 1000 cages are not measured on {n} frames")
        if n := compressibility["ideal_lattice"]:
            parts.append(f"all cages are equal, an ideal lattice, on {n} frames")
        return "; ".join(parts)
    if name == "cell_volume_shape":
        if equal_radii:
            return "all cells are equal, or unknown"
        return "particles of unequal size have no smallest cell"
    if name.startswith("lattice_"):
        return "the lattice cannot be so dense, or its cages are open"
    return _WHY.get(name, "no particle has one on any frame")
