"""Memory that freud leaves behind."""

import ctypes

__all__ = ["return_freed_memory"]


def return_freed_memory() -> None:
    """Give memory that is free back to the system.

    A tessellation consists of millions of small blocks. When they are freed, the C
    library of Linux keeps them, about 1 kB a particle, for other small blocks that
    never come. Elsewhere nothing is done.
    """
    trim = getattr(ctypes.CDLL(None), "malloc_trim", None)
    if trim is not None:
        trim(0)
