// The scene of a cage page. `cage` holds the data, lengths in diameters of the particle;
// trajcage/plots/cage_page.py writes them in front of this script.
/* global cage */
import {
  AmbientLight, BufferAttribute, BufferGeometry, Color, DirectionalLight, DoubleSide, Group,
  Mesh, MeshBasicMaterial, MeshPhongMaterial, OrthographicCamera, Raycaster, Scene,
  ShaderMaterial, SphereGeometry, Spherical, Vector2, Vector3, WebGLRenderer,
} from "three";
import { OrbitControls } from "three/examples/jsm/controls/OrbitControls.js";
import { LineMaterial } from "three/examples/jsm/lines/LineMaterial.js";
import { LineSegments2 } from "three/examples/jsm/lines/LineSegments2.js";
import { LineSegmentsGeometry } from "three/examples/jsm/lines/LineSegmentsGeometry.js";

const INK = 0x222222;
const element = name => document.getElementById(name);
const point = (values, k) => new Vector3().fromArray(values, 3 * k);
const colorOf = k => new Color(cage.colors[k % cage.colors.length]);

const centers = cage.radii.map((_, k) => point(cage.centers, k));
const corners = cage.vertices.length / 3;
const middle = new Vector3(), spread = [new Vector3(1, 1, 1), new Vector3(-1, -1, -1)]
  .map(v => v.multiplyScalar(1e300));
for (let k = 0; k < corners; k++) {
  spread[0].min(point(cage.vertices, k));
  spread[1].max(point(cage.vertices, k));
}
middle.addVectors(...spread).multiplyScalar(0.5);
let cageReach = 0;
for (let k = 0; k < corners; k++)
  cageReach = Math.max(cageReach, point(cage.vertices, k).distanceTo(middle));
const farReach = Math.max(
  cageReach, ...centers.map((c, k) => c.distanceTo(middle) + cage.radii[k]));

/** The wall: each triangle shaded as the piece of the sphere that it stands for. */
function wall() {
  const n = cage.triangles.length;
  const places = new Float32Array(3 * n), normals = new Float32Array(3 * n);
  const colors = new Float32Array(3 * n);
  cage.triangles.forEach((vertex, k) => {
    const row = cage.patch[Math.floor(k / 3)];
    const at = point(cage.vertices, vertex);
    at.toArray(places, 3 * k);
    centers[row].clone().sub(at).normalize().toArray(normals, 3 * k);
    colorOf(row).lerp(new Color(0xffffff), 0.35).toArray(colors, 3 * k);
  });
  const geometry = new BufferGeometry();
  geometry.setAttribute("position", new BufferAttribute(places, 3));
  geometry.setAttribute("normal", new BufferAttribute(normals, 3));
  geometry.setAttribute("color", new BufferAttribute(colors, 3));
  const material = new MeshPhongMaterial({
    vertexColors: true, side: DoubleSide, shininess: 25, specular: 0x333333,
    polygonOffset: true, polygonOffsetFactor: 1, polygonOffsetUnits: 1,
  });
  return new Mesh(geometry, material);
}

/** The borders of the patches of the wall: sides of one triangle of their patch only. */
function wallEdges() {
  const sides = new Map();
  for (let t = 0; t < cage.patch.length; t++)
    for (let m = 0; m < 3; m++) {
      const pair = [cage.triangles[3 * t + m], cage.triangles[3 * t + (m + 1) % 3]];
      const key = [...pair.sort((a, b) => a - b), cage.patch[t]].join();
      if (sides.has(key)) sides.set(key, []);
      else sides.set(key, pair);
    }
  const ends = [...sides.values()].flat()
    .flatMap(vertex => point(cage.vertices, vertex).toArray());
  return lines(ends, INK, 1.4);
}

const strokes = [];

/** Straight lines as wide as that many pixels at any zoom. */
function lines(ends, color, linewidth) {
  const geometry = new LineSegmentsGeometry().setPositions(ends);
  const material = new LineMaterial({ color, linewidth });
  strokes.push(material);
  return new LineSegments2(geometry, material);
}

/** A neighbor: a sphere, clear in its middle and denser towards its rim. */
function neighbor(k) {
  const material = new ShaderMaterial({
    transparent: true,
    depthWrite: false,
    uniforms: { color: { value: colorOf(k) }, chosen: { value: 0 } },
    vertexShader: `varying vec3 facing;
      void main() {
        facing = normalMatrix * normal;
        gl_Position = projectionMatrix * modelViewMatrix * vec4(position, 1.0);
      }`,
    fragmentShader: `varying vec3 facing;
      uniform vec3 color;
      uniform float chosen;
      void main() {
        vec3 n = normalize(facing);
        float rim = 1.0 - abs(n.z);
        float light = 0.75 + 0.25 * dot(n, normalize(vec3(-0.4, 0.5, 0.77)));
        float opacity = 0.10 + 0.45 * rim * rim + 0.3 * chosen;
        gl_FragColor = vec4(mix(vec3(1.0), color, 0.9) * light, opacity);
        #include <colorspace_fragment>
      }`,
  });
  const ball = new Mesh(new SphereGeometry(cage.radii[k], 64, 40), material);
  ball.position.copy(centers[k]);
  ball.userData.row = k;
  return ball;
}

/** The triangle of the weakest window, and the way to it from the corner behind it. */
function weakestWindow() {
  const group = new Group();
  if (cage.window.length !== 3) return group;
  const color = cage.window_color;
  const ring = cage.window.map(k => centers[k]);
  const geometry = new BufferGeometry().setFromPoints(ring);
  group.add(new Mesh(geometry, new MeshBasicMaterial(
    { color, side: DoubleSide, transparent: true, opacity: 0.13, depthWrite: false })));
  const ends = [0, 1, 1, 2, 2, 0].flatMap(m => ring[m].toArray());
  const outline = lines(ends, color, 3.5);
  const corner = point(cage.corner, 0);
  const through = ring[0].clone().add(ring[1]).add(ring[2]).divideScalar(3);
  const way = lines([...corner.toArray(), ...through.toArray()], color, 2);
  const dot = new Mesh(
    new SphereGeometry(0.045 * cageReach, 32, 24), new MeshBasicMaterial({ color }));
  dot.position.copy(corner);
  group.add(outline, way, dot);
  group.userData.normal = ring[1].clone().sub(ring[0]).cross(ring[2].clone().sub(ring[0]));
  if (group.userData.normal.dot(through.sub(middle)) < 0) group.userData.normal.negate();
  return group;
}

function start() {
  const view = element("view"), inset = element("inset");
  const renderer = new WebGLRenderer({ antialias: true });
  renderer.setPixelRatio(Math.min(window.devicePixelRatio || 1, 2));
  renderer.setClearColor(0xffffff);
  renderer.autoClear = false;
  view.prepend(renderer.domElement);
  const canvas = renderer.domElement;

  const scene = new Scene(), surface = wall(), edges = wallEdges();
  const neighbors = new Group(), weakest = weakestWindow();
  cage.radii.forEach((_, k) => neighbors.add(neighbor(k)));
  scene.add(new AmbientLight(0xffffff, 1.5), surface, edges, neighbors, weakest);
  const lamp = new DirectionalLight(0xffffff, 2.2);
  scene.add(lamp, lamp.target);

  const camera = new OrthographicCamera(-1, 1, 1, -1, 0, 8 * farReach);
  const across = new OrthographicCamera(-1, 1, 1, -1, 0, 8 * farReach);
  const controls = new OrbitControls(camera, canvas);
  const near = 1.5 * cageReach, far = 1.04 * farReach;
  controls.minZoom = 0.3;
  controls.maxZoom = 50 * far / cageReach;

  // seen from a little above; the weakest window, if known, neither edge-on nor flat
  let way = new Vector3(0.53, 0.42, 0.74).normalize();
  if (weakest.userData.normal) {
    const normal = weakest.userData.normal.normalize();
    const aside = way.clone().projectOnPlane(normal).normalize();
    way = normal.multiplyScalar(0.6).addScaledVector(aside, 0.8);
  }

  /** Show this many diameters from the middle to the border. */
  function fit(reach) {
    controls.target.copy(middle);
    camera.position.copy(middle).addScaledVector(way, 4 * farReach);
    camera.zoom = far / reach;
    camera.updateProjectionMatrix();
    controls.update();
    redraw();
  }

  function resize() {
    const width = view.clientWidth, height = view.clientHeight;
    renderer.setSize(width, height);
    const scale = far / Math.min(width, height);
    camera.left = -(camera.right = scale * width);
    camera.bottom = -(camera.top = scale * height);
    camera.updateProjectionMatrix();
    redraw();
  }

  let queued = false;
  function redraw() {
    if (queued) return;
    queued = true;
    requestAnimationFrame(() => { queued = false; draw(); });
  }

  function draw() {
    const width = view.clientWidth, height = view.clientHeight;
    lamp.position.copy(new Vector3(-0.4, 0.5, 0.77).applyQuaternion(camera.quaternion));
    renderer.setScissorTest(false);
    renderer.setViewport(0, 0, width, height);
    renderer.clear();
    renderer.render(scene, camera);
    const pixels = Math.min(width, height) * camera.zoom / (2 * far); // of a diameter
    // the whole beside the part, as long as the view is but a part
    const partial = Math.min(width, height) / pixels < 1.4 * far;
    inset.hidden = !partial;
    if (partial) {
      const size = inset.clientWidth;
      const left = inset.offsetLeft + inset.clientLeft;
      const bottom = height - inset.offsetTop - inset.clientTop - size;
      across.left = across.bottom = -far;
      across.right = across.top = far;
      across.quaternion.copy(camera.quaternion);
      across.position.set(0, 0, 4 * farReach).applyQuaternion(camera.quaternion).add(middle);
      across.updateProjectionMatrix();
      renderer.setScissorTest(true);
      renderer.setScissor(left, bottom, size, size);
      renderer.setViewport(left, bottom, size, size);
      renderer.clear();
      for (const stroke of strokes) stroke.linewidth *= 0.5;
      renderer.render(scene, across);
      for (const stroke of strokes) stroke.linewidth *= 2;
    }
    scaleBar(pixels);
  }

  function scaleBar(pixels) {
    const wanted = 110 / pixels, power = 10 ** Math.floor(Math.log10(wanted));
    const length = [5, 2, 1].find(m => m * power <= wanted) * power;
    element("bar").style.width = `${length * pixels}px`;
    const short = x => Number(x.toPrecision(4)).toString();
    element("bar-text").textContent =
      `${short(length)} D = ${short(length * cage.diameter)} in the unit of the input`;
  }

  // which neighbor is which: pointed at in the view or in the list
  const told = element("told"), entries = [...element("list").children];
  function choose(row) {
    neighbors.children.forEach((ball, k) => {
      ball.material.uniforms.chosen.value = k === row ? 1 : 0;
    });
    entries.forEach((entry, k) => entry.classList.toggle("chosen", k === row));
    told.textContent = row < 0 ? "" : entries[row].title;
    redraw();
  }
  const ray = new Raycaster(), pointer = new Vector2();
  canvas.addEventListener("pointermove", event => {
    if (event.buttons) return;
    const bounds = canvas.getBoundingClientRect();
    pointer.set(
      2 * (event.clientX - bounds.left) / bounds.width - 1,
      1 - 2 * (event.clientY - bounds.top) / bounds.height);
    ray.setFromCamera(pointer, camera);
    const hit = ray.intersectObjects([surface, ...neighbors.visible ? neighbors.children : []])
      .find(found => found.object !== surface || !surface.material.transparent);
    if (!hit) choose(-1);
    else if (hit.object === surface) choose(cage.patch[hit.faceIndex]);
    else choose(hit.object.userData.row);
  });
  canvas.addEventListener("pointerleave", () => choose(-1));
  entries.forEach((entry, k) => {
    for (const name of ["pointerenter", "focus"])
      entry.addEventListener(name, () => choose(k));
    for (const name of ["pointerleave", "blur"])
      entry.addEventListener(name, () => choose(-1));
  });

  element("neighbors").addEventListener("change", event => {
    neighbors.visible = event.target.checked;
    redraw();
  });
  element("window").addEventListener("change", event => {
    weakest.visible = event.target.checked;
    redraw();
  });
  element("see-through").addEventListener("change", event => {
    surface.material.transparent = event.target.checked;
    surface.material.opacity = event.target.checked ? 0.45 : 1;
    surface.material.depthWrite = !event.target.checked;
    surface.material.needsUpdate = true;
    redraw();
  });
  element("near").addEventListener("click", () => fit(near));
  element("far").addEventListener("click", () => fit(far));
  view.addEventListener("keydown", event => {
    const turns = {
      ArrowLeft: [-0.1, 0], ArrowRight: [0.1, 0], ArrowUp: [0, -0.1], ArrowDown: [0, 0.1],
    };
    const zooms = { "+": 1.15, "=": 1.15, "-": 1 / 1.15 };
    if (turns[event.key]) {
      const offset = camera.position.clone().sub(controls.target);
      const angles = new Spherical().setFromVector3(offset);
      angles.theta -= turns[event.key][0];
      angles.phi -= turns[event.key][1];
      angles.makeSafe();
      camera.position.setFromSpherical(angles).add(controls.target);
    } else if (zooms[event.key]) {
      camera.zoom *= zooms[event.key];
      camera.updateProjectionMatrix();
    } else return;
    event.preventDefault();
    controls.update();
    redraw();
  });
  controls.addEventListener("change", redraw);
  new ResizeObserver(resize).observe(view);
  resize();
  fit(Math.min(near, far));
}

try {
  start();
} catch (error) {
  console.info(error);
  element("view").textContent =
    "This browser offers no WebGL, which this page draws with. Open it in a current "
    + "browser with WebGL switched on, or write a picture: trajcage cage ... -o cage.png";
}
