// The page of a cage in the plane: zooms and shifts the drawing by its viewBox.
"use strict";
{
  const element = name => document.getElementById(name);
  const view = element("view"), main = element("main"), inset = element("inset");
  const { whole, close, diameter, scale } = main.dataset;
  const numbers = text => text.split(" ").map(Number);
  const entries = [...element("list").children];
  const disks = [...main.querySelectorAll("#disks circle")];
  const wholeEdge = numbers(whole)[2], closeEdge = numbers(close)[2];
  let box;

  function show(next) {
    box = next;
    main.setAttribute("viewBox", box.join(" "));
    const pixels = Math.min(view.clientWidth, view.clientHeight) / box[2]; // of a unit
    main.setAttribute("font-size", 13 / pixels);
    inset.hidden = box[2] > 0.7 * wholeEdge;
    if (!inset.hidden)
      inset.firstElementChild.setAttribute("font-size", 11 * wholeEdge / inset.clientWidth);
    const wanted = 110 / (pixels * scale), power = 10 ** Math.floor(Math.log10(wanted));
    const length = [5, 2, 1].find(m => m * power <= wanted) * power;
    const short = x => Number(x.toPrecision(4)).toString();
    element("bar").style.width = `${length * scale * pixels}px`;
    element("bar-text").textContent =
      `${short(length)} D = ${short(length * diameter)} in the unit of the input`;
  }

  /** Zoom about a place given in shares of the box. */
  function zoom(factor, x = 0.5, y = 0.5) {
    const edge = Math.min(Math.max(box[2] * factor, 0.02 * closeEdge), 3 * wholeEdge);
    show([box[0] + x * (box[2] - edge), box[1] + y * (box[3] - edge), edge, edge]);
  }

  function shift(dx, dy) { // in pixels
    const unit = box[2] / Math.min(view.clientWidth, view.clientHeight);
    show([box[0] - dx * unit, box[1] - dy * unit, box[2], box[3]]);
  }

  view.addEventListener("wheel", event => {
    event.preventDefault();
    const bounds = view.getBoundingClientRect();
    const edge = Math.min(bounds.width, bounds.height);
    zoom(
      Math.exp(0.001 * event.deltaY),
      0.5 + (event.clientX - bounds.left - bounds.width / 2) / edge,
      0.5 + (event.clientY - bounds.top - bounds.height / 2) / edge);
  }, { passive: false });
  view.addEventListener("pointerdown", event => view.setPointerCapture(event.pointerId));
  view.addEventListener("pointermove", event => {
    if (event.buttons) shift(event.movementX, event.movementY);
  });
  view.addEventListener("keydown", event => {
    const shifts = {
      ArrowLeft: [30, 0], ArrowRight: [-30, 0], ArrowUp: [0, 30], ArrowDown: [0, -30],
    };
    if (shifts[event.key]) shift(...shifts[event.key]);
    else if (event.key === "+" || event.key === "=") zoom(1 / 1.15);
    else if (event.key === "-") zoom(1.15);
    else return;
    event.preventDefault();
  });

  function choose(row) {
    disks.forEach((disk, k) => disk.setAttribute("fill-opacity", k === row ? 0.6 : 0.2));
    entries.forEach((entry, k) => entry.classList.toggle("chosen", k === row));
    element("told").textContent = row < 0 ? "" : entries[row].title;
  }
  [...entries, ...disks].forEach((item, k) => {
    item.addEventListener("pointerenter", () => choose(k % disks.length));
    item.addEventListener("pointerleave", () => choose(-1));
  });
  for (const [control, part] of [["neighbors", "disks"], ["neighbors", "names"], ["window", "weakest"]])
    element(control).addEventListener("change", event => {
      element(part).style.display = event.target.checked ? "" : "none";
    });
  element("near").addEventListener("click", () => show(numbers(close)));
  element("far").addEventListener("click", () => show(numbers(whole)));
  window.addEventListener("resize", () => show(box));
  show(numbers(closeEdge > 0.15 * wholeEdge ? whole : close));
}
