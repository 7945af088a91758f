"""A cage as a file: a page, a mesh, or a picture."""

from pathlib import Path

import numpy as np
from matplotlib.colors import to_rgb

from trajcage.analysis.cage_mesh import CageMesh
from trajcage.analysis.cage_outline import CageOutline
from trajcage.errors import ResultFileError, UsageError
from trajcage.plots.cage_page import cage_page
from trajcage.plots.cage_picture import cage_drawing
from trajcage.plots.cage_plane import plane_drawing, plane_page
from trajcage.plots.saving import FORMATS, figure_bytes
from trajcage.plots.style import PALETTE, styled

__all__ = ["write_cage"]


def write_cage(
    cage: CageMesh | CageOutline,
    file: str | Path,
    source: str,
    *,
    overwrite: bool = False,
) -> None:
    """Write a cage in the form that the name of the file asks for.

    Parameters
    ----------
    cage : CageMesh or CageOutline
        Its wall, in space or in the plane.
    file : path
        ``.html`` for a page that needs no network, ``.ply`` for a mesh with colors in
        units of the input (in space only), ``.png``, ``.svg`` or ``.pdf`` for a picture.
    source : str
        File and frame of the particle, as told to the reader.
    overwrite : bool
        Whether to replace a file that is there.

    Raises
    ------
    UsageError
        If the name has another ending, or asks for a mesh of a cage in the plane.
    ResultFileError
        If the file is in the way or cannot be written.
    """
    target = Path(file)
    form = target.suffix.lower().removeprefix(".")
    if form not in ("html", "ply", *FORMATS):
        raise UsageError(
            f"cannot tell the form of {target.name}; its name must end in .html, .ply, "
            f".{', .'.join(FORMATS)}"
        )
    if target.exists() and not overwrite:
        raise ResultFileError(
            f"{target} exists; replace it with --overwrite, or choose another name"
        )
    if form == "ply" and isinstance(cage, CageOutline):
        raise UsageError(
            "a .ply file holds a surface in space, and these particles lie in a plane; "
            f"choose .html, .{', .'.join(FORMATS)}"
        )
    data = _contents(cage, form, source)
    try:
        target.write_bytes(data)
    except OSError as error:
        raise ResultFileError(f"cannot write {target}: {error.strerror}") from error


def _contents(cage: CageMesh | CageOutline, form: str, source: str) -> bytes:
    if isinstance(cage, CageOutline):
        if form == "html":
            return plane_page(cage, source).encode()
        with styled():
            return figure_bytes(plane_drawing(cage, source), form)
    if form == "html":
        return cage_page(cage, source).encode()
    if form == "ply":
        return _ply(cage, source).encode()
    with styled():
        return figure_bytes(cage_drawing(cage, source), form)


def _ply(mesh: CageMesh, source: str) -> str:
    """Write the mesh as text; a property tells the neighbor of each triangle."""
    colors = np.array([to_rgb(color) for color in PALETTE])
    bytes_ = np.rint(255 * colors).astype(int)[mesh.patch % len(PALETTE)]
    ids = mesh.neighbors[mesh.patch]
    comment = " ".join(f"{source}: cage of particle {mesh.particle_id}".split())
    lines = [
        "ply",
        "format ascii 1.0",
        f"comment {comment.encode('ascii', 'replace').decode()}",
        "comment positions relative to the particle, in the unit of the input",
        f"element vertex {len(mesh.vertices)}",
        *(f"property double {axis}" for axis in "xyz"),
        f"element face {len(mesh.triangles)}",
        "property list uchar int vertex_indices",
        *(f"property uchar {name}" for name in ("red", "green", "blue")),
        "property int neighbor_id",
        "end_header",
    ]
    lines += [" ".join(map(repr, row)) for row in mesh.vertices.tolist()]
    lines += [
        f"3 {a} {b} {c} {red} {green} {blue} {i}"
        for (a, b, c), (red, green, blue), i in zip(
            mesh.triangles.tolist(), bytes_.tolist(), ids.tolist(), strict=True
        )
    ]
    return "\n".join(lines) + "\n"
