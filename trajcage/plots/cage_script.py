"""The script of a cage page: turns and draws a few thousand triangles, nothing else."""

__all__ = ["CONTROLS", "SCRIPT"]

CONTROLS = """<p>
<label><input type="checkbox" id="neighbors" checked> neighbors</label>
<label><input type="checkbox" id="window" checked> weakest window</label>
<button id="near" type="button">fit the cage</button>
<button id="far" type="button">fit the neighbors</button>
</p>
<canvas id="view" tabindex="0" role="img"
  aria-label="The wall of the cage among its bounding neighbors"
  style="width:100%;height:34rem;border:1px solid #ccc;touch-action:none"></canvas>
<p>Drag or use the arrow keys to turn, the wheel or + and - to zoom. One color a
neighbor; translucent: the bounding neighbors at their true size; dark red: the triangle
of the weakest window, and the corner of the wall behind it.</p>"""

SCRIPT = """
const view = document.getElementById("view"), pen = view.getContext("2d");
const option = name => document.getElementById(name);
const nTriangles = cage.patch.length, nNeighbors = cage.radii.length;
let turn = [[0.848, 0, 0.530], [0.216, 0.914, -0.345], [-0.484, 0.407, 0.775]];
let zoom = 1;

function rotated(values, k) {
  const x = values[3 * k], y = values[3 * k + 1], z = values[3 * k + 2];
  return turn.map(row => row[0] * x + row[1] * y + row[2] * z);
}
function farthest(values, radii) {
  let most = 0;
  for (let k = 0; k < values.length / 3; k++) {
    const size = Math.hypot(values[3 * k], values[3 * k + 1], values[3 * k + 2]);
    most = Math.max(most, size + (radii ? radii[k] : 0));
  }
  return most;
}
const nearReach = 1.15 * farthest(cage.vertices);
const farReach = 1.02 * farthest(cage.centers, cage.radii);

function spin(dx, dy) {
  const a = Math.cos(dx), b = Math.sin(dx), c = Math.cos(dy), d = Math.sin(dy);
  const step = [[a, 0, b], [b * d, c, -a * d], [-b * c, d, a * c]];
  turn = step.map(row => [0, 1, 2].map(
    m => row[0] * turn[0][m] + row[1] * turn[1][m] + row[2] * turn[2][m]));
  // keep it a rotation
  const length = v => Math.hypot(...v);
  const scaled = v => v.map(x => x / length(v));
  const dot = (u, v) => u[0] * v[0] + u[1] * v[1] + u[2] * v[2];
  turn[0] = scaled(turn[0]);
  const overlap = dot(turn[0], turn[1]);
  turn[1] = scaled(turn[1].map((x, m) => x - overlap * turn[0][m]));
  const [u, v] = turn;
  turn[2] = [u[1] * v[2] - u[2] * v[1], u[2] * v[0] - u[0] * v[2],
             u[0] * v[1] - u[1] * v[0]];
}

function draw() {
  const ratio = window.devicePixelRatio || 1;
  const width = view.clientWidth, height = view.clientHeight;
  view.width = width * ratio;
  view.height = height * ratio;
  pen.setTransform(ratio, 0, 0, ratio, 0, 0);
  pen.clearRect(0, 0, width, height);
  const scale = 0.5 * Math.min(width, height) / zoom;
  const place = p => [width / 2 + scale * p[0], height / 2 - scale * p[1]];
  const centers = [];
  for (let k = 0; k < nNeighbors; k++) centers.push(rotated(cage.centers, k));
  const order = centers.map((_, k) => k).sort((a, b) => centers[a][2] - centers[b][2]);
  const show = option("neighbors").checked;
  const disk = (k, fill, line) => {
    const [x, y] = place(centers[k]);
    const [r, g, b] = cage.colors[k % cage.colors.length];
    pen.beginPath();
    pen.arc(x, y, scale * cage.radii[k], 0, 2 * Math.PI);
    pen.fillStyle = `rgba(${r},${g},${b},${fill})`;
    pen.fill();
    pen.strokeStyle = `rgba(34,34,34,${line})`;
    pen.lineWidth = 1;
    pen.stroke();
  };
  if (show) order.filter(k => centers[k][2] <= 0).forEach(k => disk(k, 0.18, 0.5));
  const points = [];
  for (let k = 0; k < cage.vertices.length / 3; k++)
    points.push(rotated(cage.vertices, k));
  const depth = new Float64Array(nTriangles);
  const sorted = [];
  for (let t = 0; t < nTriangles; t++) {
    for (let m = 0; m < 3; m++) depth[t] += points[cage.triangles[3 * t + m]][2];
    sorted.push(t);
  }
  sorted.sort((a, b) => depth[a] - depth[b]);
  for (const t of sorted) {
    const [p, q, s] = [0, 1, 2].map(m => points[cage.triangles[3 * t + m]]);
    const u = q.map((x, m) => x - p[m]), v = s.map((x, m) => x - p[m]);
    const normal = [u[1] * v[2] - u[2] * v[1], u[2] * v[0] - u[0] * v[2],
                    u[0] * v[1] - u[1] * v[0]];
    const size = Math.hypot(...normal) || 1;
    const light = 0.62 + 0.38 * (-0.4 * normal[0] + 0.5 * normal[1]
                                 + 0.77 * normal[2]) / size;
    const base = cage.colors[cage.patch[t] % cage.colors.length];
    const color = base.map(c => Math.round((140 + 0.45 * c) * light));
    pen.fillStyle = pen.strokeStyle = `rgb(${color.join(",")})`;
    pen.lineWidth = 0.6;
    pen.beginPath();
    pen.moveTo(...place(p));
    pen.lineTo(...place(q));
    pen.lineTo(...place(s));
    pen.closePath();
    pen.fill();
    pen.stroke();
  }
  if (show) order.filter(k => centers[k][2] > 0).forEach(k => disk(k, 0.07, 0.3));
  if (option("window").checked && cage.window.length) {
    pen.beginPath();
    cage.window.forEach(
      (k, m) => pen[m ? "lineTo" : "moveTo"](...place(centers[k])));
    pen.closePath();
    pen.fillStyle = "rgba(136,9,64,0.10)";
    pen.fill();
    pen.strokeStyle = "rgb(136,9,64)";
    pen.lineWidth = 2.5;
    pen.stroke();
    pen.beginPath();
    pen.arc(...place(rotated(cage.corner, 0)), 4, 0, 2 * Math.PI);
    pen.fillStyle = "rgb(136,9,64)";
    pen.fill();
  }
  if (show) {
    pen.fillStyle = "#222";
    pen.font = "12px sans-serif";
    pen.textAlign = "center";
    order.forEach(k => pen.fillText(cage.ids[k], ...place(centers[k])));
  }
}

let queued = false;
function redraw() {
  if (queued) return;
  queued = true;
  requestAnimationFrame(() => { queued = false; draw(); });
}
let held = null;
view.addEventListener("pointerdown", event => {
  held = [event.clientX, event.clientY];
  view.setPointerCapture(event.pointerId);
});
view.addEventListener("pointermove", event => {
  if (!held) return;
  spin(0.008 * (event.clientX - held[0]), 0.008 * (event.clientY - held[1]));
  held = [event.clientX, event.clientY];
  redraw();
});
for (const name of ["pointerup", "pointercancel"])
  view.addEventListener(name, () => { held = null; });
view.addEventListener("wheel", event => {
  event.preventDefault();
  zoom *= Math.exp(0.001 * event.deltaY);
  redraw();
}, {passive: false});
view.addEventListener("keydown", event => {
  const turns = {ArrowLeft: [-0.1, 0], ArrowRight: [0.1, 0], ArrowUp: [0, -0.1],
                 ArrowDown: [0, 0.1]};
  if (turns[event.key]) spin(...turns[event.key]);
  else if (event.key === "+") zoom *= 0.9;
  else if (event.key === "-") zoom /= 0.9;
  else return;
  event.preventDefault();
  redraw();
});
for (const name of ["neighbors", "window"])
  option(name).addEventListener("change", redraw);
option("near").addEventListener("click", () => { zoom = nearReach; redraw(); });
option("far").addEventListener("click", () => { zoom = farReach; redraw(); });
window.addEventListener("resize", redraw);
zoom = nearReach > 0.08 * farReach ? farReach : nearReach;
draw();
"""
