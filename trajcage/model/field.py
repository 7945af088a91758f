"""What a stored quantity is: its name, meaning, unit and type, declared once."""

from dataclasses import dataclass

__all__ = ["Field"]


@dataclass(frozen=True)
class Field:
    """Declaration of one quantity of the result file.

    Parameters
    ----------
    name : str
        Name in the file, in `--json` output and in the library.
    description : str
        One sentence that defines the quantity.
    unit : str
        ``"1"`` for pure numbers, else powers in the H5MD notation of
        ``length`` and ``time``, such as ``"length+3"``.
    dtype : str
        Numpy type code of the stored values.
    per_particle : bool
        Whether there is one value a particle and frame, or one a frame.
    shape : tuple of int
        Trailing shape of one value, empty for scalars.
    codes : tuple of str
        Names of the values 0, 1, 2, ... of a field of codes, empty otherwise.
    """

    name: str
    description: str
    unit: str = "1"
    dtype: str = "f8"
    per_particle: bool = True
    shape: tuple[int, ...] = ()
    codes: tuple[str, ...] = ()
