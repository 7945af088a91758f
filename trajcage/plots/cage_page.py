"""A cage in space as a page to turn it around in a browser, without a network."""

import html
import json
from importlib.resources import files

import numpy as np
from numpy.typing import NDArray

from trajcage.analysis.cage_mesh import CageMesh
from trajcage.plots.cage_picture import WINDOW, cage_facts
from trajcage.plots.page import bullets, page, section
from trajcage.plots.style import PALETTE

__all__ = ["SCENE_STYLE", "cage_page", "neighbor_list", "scene_script"]

SCENE_STYLE = """<style>
#scene { display: flex; flex-wrap: wrap; gap: 1rem; }
#view { position: relative; flex: 1 1 26rem; min-width: 0; height: 34rem;
  border: 1px solid #ccc; touch-action: none; overflow: hidden; }
#view canvas, #view svg { display: block; }
#inset[hidden] { display: none; }
#inset { position: absolute; top: 8px; right: 8px; width: 10rem; height: 10rem;
  border: 1px solid #8a8a8a; pointer-events: none; }
#scale { position: absolute; left: 12px; bottom: 10px; font-size: 0.8rem;
  pointer-events: none; }
#bar { height: 5px; border: 1.5px solid #222; border-top: 0; }
#scale, #told { background: rgba(255, 255, 255, 0.7); }
#told { position: absolute; left: 12px; top: 8px; font-size: 0.85rem;
  pointer-events: none; }
#key { flex: 0 1 15rem; font-size: 0.87rem; }
#key p { margin: 0 0 0.6rem; }
#list { list-style: none; margin: 0; padding: 0; display: flex; flex-wrap: wrap;
  gap: 0.25rem; }
#list li { padding: 0.05rem 0.4rem; border: 1px solid #e4e4e4; cursor: default; }
#list li.chosen { background: #222; color: #fff; }
.chip { display: inline-block; width: 0.7em; height: 0.7em; border-radius: 50%;
  margin-right: 0.3em; }
</style>"""

_SCENE = """<div id="scene">
<div id="view" tabindex="0" role="img"
  aria-label="The wall of the cage among its bounding neighbors">
<div id="inset" hidden></div><div id="told" aria-live="polite"></div>
<div id="scale"><div id="bar"></div><span id="bar-text"></span></div>
</div>
<div id="key">
<p><button id="near" type="button">fit the cage</button>
<button id="far" type="button">fit the neighbors</button></p>
<p><label><input type="checkbox" id="neighbors" checked> neighbors</label><br>
<label><input type="checkbox" id="window" checked> weakest window</label><br>
<label><input type="checkbox" id="see-through"> translucent wall</label></p>
<p>Drag or use the arrow keys to turn, the wheel or + and - to zoom, the right button to
shift.</p>
<p>Solid: the wall of the cage, in the color of the neighbor that each part belongs to.
Translucent spheres: the bounding neighbors at their true size and place.
<span style="color:WINDOW">Dark red</span>: the triangle of the weakest window, the
corner of the wall behind it, and the way there. Small frame: the whole, when the view
is but a part.</p>
<p>Bounding neighbors by id; point at one to see which it is:</p>
NEIGHBORS
</div></div>
<noscript><p>This page needs JavaScript to draw.</p></noscript>"""


def cage_page(mesh: CageMesh, source: str) -> str:
    """Write the page of a cage.

    Parameters
    ----------
    mesh : CageMesh
        Its wall.
    source : str
        File and frame, for the line below the title.
    """
    d = 2.0 * mesh.radius
    data = {
        "diameter": d,
        "vertices": _rounded(mesh.vertices / d),
        "triangles": mesh.triangles.ravel().tolist(),
        "patch": mesh.patch.tolist(),
        "centers": _rounded(mesh.vectors / d),
        "radii": _rounded(mesh.radii / d),
        "window": list(mesh.window),
        "corner": _rounded(mesh.window_corner / d),
        "colors": list(PALETTE),
        "window_color": WINDOW,
    }
    scene = _SCENE.replace("WINDOW", WINDOW).replace(
        "NEIGHBORS", neighbor_list(mesh.neighbors, mesh.vectors / d, mesh.radii / d)
    )
    facts = section("What is seen", bullets(cage_facts(mesh)))
    numbers = json.dumps(data, separators=(",", ":"))
    script = f"const cage = {numbers};\n{scene_script('cage_page.js')}"
    title = f"Cage of particle {mesh.particle_id}"
    return page(title, source, [SCENE_STYLE, scene, facts], script=script)


def scene_script(name: str) -> str:
    """Return a script that lies beside this module."""
    return files("trajcage.plots").joinpath(name).read_text("utf-8")


def neighbor_list(
    ids: NDArray[np.int64], vectors: NDArray[np.float64], radii: NDArray[np.float64]
) -> str:
    """List the neighbors with their colors; lengths in diameters of the particle."""
    entries = []
    for k, (i, vector, radius) in enumerate(zip(ids, vectors, radii, strict=True)):
        told = (
            f"neighbor {i}: {np.linalg.norm(vector):.5g} D away, its own diameter "
            f"{2.0 * radius:.5g} D"
        )
        chip = f'<span class="chip" style="background:{PALETTE[k % len(PALETTE)]}">'
        entries.append(
            f'<li tabindex="0" title="{html.escape(told)}">{chip}</span>{i}</li>'
        )
    return f'<ul id="list">{"".join(entries)}</ul>'


def _rounded(values: NDArray[np.float64]) -> list[float]:
    return [float(f"{x:.7g}") for x in values.ravel().tolist()]
