"""How many threads freud may use in this process."""

import freud

__all__ = ["set_threads"]


def set_threads(n_threads: int) -> None:
    """Set the number of threads freud uses; worker processes use one each.

    Parameters
    ----------
    n_threads : int
        Threads of this process, at least 1.
    """
    freud.parallel.set_num_threads(n_threads)
