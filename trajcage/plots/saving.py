"""Figures as files and as bytes."""

import io
from collections.abc import Iterable
from pathlib import Path

from trajcage.errors import ResultFileError, UsageError
from trajcage.plots.catalog import Figures, draw_figures
from trajcage.plots.style import Drawing, styled
from trajcage.store import Result

__all__ = ["FORMATS", "figure_bytes", "write_figures"]

#: File formats of figures.
FORMATS = ("png", "svg", "pdf")

# Nothing that differs between two runs on the same data.
_STAMP = {"png": "Software", "svg": "Date", "pdf": "CreationDate"}


def figure_bytes(drawing: Drawing, form: str, dpi: float = 200.0) -> bytes:
    """Return a figure as the contents of a file.

    Parameters
    ----------
    drawing : Drawing
        The figure.
    form : {"png", "svg", "pdf"}
        Format.
    dpi : float
        Dots an inch of pictures, also of those within vector formats.
    """
    with styled(), io.BytesIO() as stream:
        metadata = {_STAMP[form]: None, "Title": drawing.title}
        drawing.figure.savefig(stream, format=form, dpi=dpi, metadata=metadata)
        return stream.getvalue()


def write_figures(
    result: Result,
    directory: str | Path,
    names: Iterable[str] = (),
    *,
    frame: int | None = None,
    form: str = "png",
    overwrite: bool = False,
) -> tuple[dict[str, Path], Figures]:
    """Draw figures of a result file and write each to a file of its name.

    Parameters
    ----------
    result : Result
        An open result file.
    directory : path
        Where to; made if it is not there.
    names : iterable of str
        Of :data:`~trajcage.plots.FIGURES`; all unless given.
    frame : int, optional
        Frame of the slice, as numbered in the trajectory; the last one unless given.
    form : {"png", "svg", "pdf"}
        File format.
    overwrite : bool
        Whether to replace figures that are there.

    Returns
    -------
    paths : dict of str to Path
        The files, by name of the figure.
    figures : Figures
        With the reasons of those left out.

    Raises
    ------
    UsageError
        If a figure, the frame or the format is unknown.
    ResultFileError
        If a file is in the way, cannot be written, or the result cannot be used.
    """
    if form not in FORMATS:
        raise UsageError(
            f"there is no format {form!r}; choose among {', '.join(FORMATS)}"
        )
    figures = draw_figures(result, names, frame=frame)
    target = Path(directory)
    paths = {name: target / f"{name}.{form}" for name in figures.drawn}
    for path in paths.values():
        if path.exists() and not overwrite:
            raise ResultFileError(
                f"{path} exists; replace it with --overwrite, or choose another directory"
            )
    try:
        if paths:
            target.mkdir(parents=True, exist_ok=True)
        for name, path in paths.items():
            path.write_bytes(figure_bytes(figures.drawn[name], form))
    except OSError as error:
        raise ResultFileError(
            f"cannot write figures to {target}: {error.strerror}"
        ) from error
    return paths, figures
