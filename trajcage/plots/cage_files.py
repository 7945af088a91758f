"""A cage as a file: a page to turn it around, a mesh, or a picture."""

import json
from pathlib import Path

import numpy as np
from matplotlib.colors import to_rgb
from numpy.typing import NDArray

from trajcage.analysis.cage_mesh import CageMesh
from trajcage.errors import ResultFileError, UsageError
from trajcage.plots.cage_picture import cage_drawing, cage_facts
from trajcage.plots.cage_script import CONTROLS, SCRIPT
from trajcage.plots.page import bullets, page, section
from trajcage.plots.saving import FORMATS, figure_bytes
from trajcage.plots.style import PALETTE, styled

__all__ = ["write_cage"]


def write_cage(
    mesh: CageMesh, file: str | Path, source: str, *, overwrite: bool = False
) -> None:
    """Write a cage in the form that the name of the file asks for.

    Parameters
    ----------
    mesh : CageMesh
        Its wall.
    file : path
        ``.html`` for a page that needs no network, ``.ply`` for a mesh with colors in
        units of the input, ``.png``, ``.svg`` or ``.pdf`` for a picture.
    source : str
        File and frame of the particle, as told to the reader.
    overwrite : bool
        Whether to replace a file that is there.

    Raises
    ------
    UsageError
        If the name has another ending.
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
    if form == "html":
        data = _page(mesh, source).encode()
    elif form == "ply":
        data = _ply(mesh, source).encode()
    else:
        with styled():
            data = figure_bytes(cage_drawing(mesh, source), form)
    try:
        target.write_bytes(data)
    except OSError as error:
        raise ResultFileError(f"cannot write {target}: {error.strerror}") from error


def _page(mesh: CageMesh, source: str) -> str:
    d = 2.0 * mesh.radius
    data = {
        "vertices": _rounded(mesh.vertices / d),
        "triangles": mesh.triangles.ravel().tolist(),
        "patch": mesh.patch.tolist(),
        "centers": _rounded(mesh.vectors / d),
        "radii": _rounded(mesh.radii / d),
        "ids": mesh.neighbors.tolist(),
        "window": list(mesh.window),
        "corner": _rounded(mesh.window_corner / d),
        "colors": [[round(255 * c) for c in to_rgb(color)] for color in PALETTE],
    }
    script = f"const cage = {json.dumps(data, separators=(',', ':'))};\n{SCRIPT}"
    facts = section("What is seen", bullets(cage_facts(mesh)))
    title = f"Cage of particle {mesh.particle_id}"
    return page(title, source, [CONTROLS, facts], script=script)


def _rounded(values: NDArray[np.float64]) -> list[float]:
    return [float(f"{x:.7g}") for x in values.ravel().tolist()]


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
