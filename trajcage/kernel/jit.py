"""The one place that decides how kernels are compiled."""

import hashlib
import logging
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, ParamSpec, TypeVar

import numba
from numba.core.codegen import JITCodeLibrary
from numba.core.compiler import CompilerBase, DefaultPassBuilder

__all__ = ["compiled", "helper", "inlined", "is_compiled"]

_log = logging.getLogger(__name__)

P = ParamSpec("P")
R = TypeVar("R")


def _cache_directory() -> Path | None:
    """Return a writable directory for machine code, or None.

    numba notices only changes of the file that holds a function, not of the
    helpers it calls, so the directory's name carries a digest of all kernels.
    """
    digest = hashlib.sha256()
    for source in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(source.read_bytes())
    parents = [
        os.environ.get("NUMBA_CACHE_DIR"),
        os.environ.get("XDG_CACHE_HOME"),
        str(Path("~/.cache").expanduser()),
    ]
    for parent in filter(None, parents):
        directory = Path(parent) / "trajcage" / digest.hexdigest()[:16]
        try:
            directory.mkdir(parents=True, exist_ok=True)
            probe = directory / f".writable-{os.getpid()}"
            probe.touch()
            probe.unlink()
        except OSError:
            continue
        return directory
    _log.warning(
        "no writable cache directory: the kernels are compiled anew in every run "
        "(a few seconds); set NUMBA_CACHE_DIR to a writable directory to avoid that"
    )
    return None


_CACHE_DIRECTORY = _cache_directory()


def is_compiled() -> bool:
    """Whether machine code of these kernels is there, from an earlier run."""
    return _CACHE_DIRECTORY is not None and any(_CACHE_DIRECTORY.rglob("*.nbc"))


def compiled(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a kernel that Python calls, with its machine code cached.

    No GIL; the error model of numpy lets loops with divisions become vector
    code; ``fastmath`` stays off, since exact volumes rely on NaN and rounding.
    """
    return _compile(function, cache=_CACHE_DIRECTORY is not None)


def helper(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a function that only kernels call.

    It has no entry from Python, it is optimized and cached as part of the
    kernels that use it, and it counts no references to its arrays (so it
    cannot allocate any): the atomic counters would cost more than the geometry.
    """
    return _compile(
        function,
        no_cpython_wrapper=True,
        no_cfunc_wrapper=True,
        _nrt=False,
        pipeline_class=_HelperCompiler,
    )


def inlined(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a helper right into every place that calls it.

    A call passes every field of every array, which costs more than a small
    function does. For small helpers, and larger ones with a single caller.
    """
    return _compile(
        function,
        no_cpython_wrapper=True,
        no_cfunc_wrapper=True,
        _nrt=False,
        forceinline=True,
        pipeline_class=_HelperCompiler,
    )


class _Part(JITCodeLibrary):  # type: ignore[misc]
    """Code that is linked into kernels and never runs by itself.

    numba optimizes a function together with all that it calls and makes
    machine code of it, then does the same again for its caller, and so on up:
    a quarter of the time. Here only the kernel on top goes through that.
    """

    def _optimize_final_module(self) -> None:
        pass

    def _finalize_final_module(self) -> None:
        self._finalized = True

    def get_pointer_to_function(self, _name: str) -> int:
        return 0

    @property
    def codegen(self) -> "_Part":
        return self

    def set_env(self, _name: str, _env: object) -> None:
        """Set no environment: it is for exceptions, and helpers raise none."""


class _HelperCompiler(CompilerBase):  # type: ignore[misc]
    """numba's usual passes, with a library of our own for the code."""

    def define_pipelines(self) -> list[Any]:
        state = self.state
        state.library = _Part(state.targetctx.codegen(), state.func_id.func_qualname)
        return [DefaultPassBuilder.define_nopython_pipeline(state)]


def _compile(function: Callable[P, R], **options: Any) -> Callable[P, R]:
    config: Any = numba.config
    njit: Any = numba.njit
    before = config.CACHE_DIR
    config.CACHE_DIR = str(_CACHE_DIRECTORY or before)
    try:
        decorate = njit(nogil=True, error_model="numpy", fastmath=False, **options)
        result: Callable[P, R] = decorate(function)
    finally:
        config.CACHE_DIR = before
    return result
