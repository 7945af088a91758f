"""Packing fractions at which hard particles change phase."""

from dataclasses import dataclass

__all__ = [
    "DISK_LIQUID_END",
    "HEXATIC_SOLID",
    "MELTING",
    "PHASE_MARKS",
    "PhaseMark",
    "phase_marks",
]

#: Packing fractions that also bound equations of state.
DISK_LIQUID_END, HEXATIC_SOLID, MELTING = 0.700, 0.720, 0.5433


@dataclass(frozen=True)
class PhaseMark:
    """A published mark on the axis of packing fractions.

    Parameters
    ----------
    name : str
        What happens there.
    dimensions : int
        2 or 3.
    packing_fraction : float
        Where.
    pressure : float or None
        P diameter^d / (k T) there, if published.
    source : str
        Publication.
    provenance : str
        How the number came here: ``"read"`` in a text that states it, or from
        ``"memory"`` of the publication, with what supports it.
    """

    name: str
    dimensions: int
    packing_fraction: float
    pressure: float | None
    source: str
    provenance: str


_COEXISTENCE = (
    "Fortini & Dijkstra 2006, J. Phys.: Condens. Matter 18, L371; "
    "Vega & Noya 2007, J. Chem. Phys. 127, 154113; "
    "Zykova-Timan, Horbach & Binder 2010, J. Chem. Phys. 133, 014705"
)
_COEXISTENCE_PROVENANCE = (
    "memory; the fluid and crystal equations of state give equal pressure there"
)
_DISKS = "Bernard & Krauth 2011, Phys. Rev. Lett. 107, 155704"

#: By dimension and rising packing fraction.
PHASE_MARKS = (
    PhaseMark(
        "liquid",
        2,
        DISK_LIQUID_END,
        9.185,
        _DISKS,
        "read in a summary; pressure memory",
    ),
    PhaseMark("hexatic", 2, 0.716, 9.185, _DISKS, "read in a summary; pressure memory"),
    PhaseMark("hexatic-solid", 2, HEXATIC_SOLID, None, _DISKS, "memory"),
    PhaseMark("freezing", 3, 0.4917, 11.57, _COEXISTENCE, _COEXISTENCE_PROVENANCE),
    PhaseMark("melting", 3, MELTING, 11.57, _COEXISTENCE, _COEXISTENCE_PROVENANCE),
    PhaseMark(
        "colloid glass",
        3,
        0.58,
        None,
        "Pusey & van Megen 1986, Nature 320, 340",
        "read in later papers; depends on polydispersity and time scale",
    ),
)


def phase_marks(dimensions: int) -> tuple[PhaseMark, ...]:
    """Return the marks of one dimension, by rising packing fraction."""
    return tuple(mark for mark in PHASE_MARKS if mark.dimensions == dimensions)
