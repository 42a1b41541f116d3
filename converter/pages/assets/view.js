"use strict";
// A picture that can be moved and enlarged, and a chart along a profile: shared by all pages.
const DATA = JSON.parse(document.getElementById("data").textContent);
const SVG = "http://www.w3.org/2000/svg";
const PAPER = 690;  // width of a printed page
const calm = matchMedia("(prefers-reduced-motion: reduce)");

function figure(value, signed) {
  if (value === null || !Number.isFinite(value)) return "\u2013";
  let text = String(Number(value.toPrecision(4)));
  if (signed && value > 0) text = "+" + text;
  return text.replace(/^-/, "\u2212");
}

function element(parent, name, attributes, text) {
  const made = document.createElementNS(SVG, name);
  for (const key of Object.keys(attributes)) made.setAttribute(key, attributes[key]);
  if (text !== undefined) made.textContent = text;
  parent.append(made);
  return made;
}

// round steps that cut a range into few parts
function steps(low, high, parts) {
  const least = (high - low) / parts, power = Math.pow(10, Math.floor(Math.log10(least)));
  const step = [1, 2, 5, 10].map(digit => digit * power).find(size => size >= least * 0.999);
  const found = [];
  for (let k = Math.ceil(low / step - 1e-9); k * step <= high + 1e-9 * step; k++) found.push(Number((k * step).toPrecision(12)));
  return found;
}

class View {
  // svg: the picture. Elements of class `mark` keep their size; one that a later one covers is hidden until there is room.
  constructor(svg, onPoint, onStep) {
    this.svg = svg;
    const box = svg.getAttribute("viewBox").split(" ").map(Number);
    this.home = { x: box[0] + box[2] / 2, y: box[1] + box[3] / 2, w: box[2], h: box[3] };
    this.still = Array.from(svg.querySelectorAll(".mark")).reverse().map(node => ({ node, x: +node.dataset.x, y: +node.dataset.y }));
    this.pointers = new Map();
    this.moved = false;
    this.fit(false);
    new ResizeObserver(() => this.draw()).observe(svg);
    addEventListener("beforeprint", () => this.draw(PAPER));
    addEventListener("afterprint", () => this.draw());
    svg.addEventListener("wheel", event => {
      event.preventDefault();
      const lines = event.deltaMode === 1 ? 16 : event.deltaMode === 2 ? 400 : 1;
      this.zoom(Math.exp(-event.deltaY * lines * 0.0018), this.place(event));
    }, { passive: false });
    svg.addEventListener("pointerdown", event => {
      if (event.button) return;
      this.pointers.set(event.pointerId, event);
      this.moved = false;
      svg.setPointerCapture(event.pointerId);
    });
    svg.addEventListener("pointermove", event => this.drag(event, onPoint));
    for (const kind of ["pointerup", "pointercancel"])
      svg.addEventListener(kind, event => {
        this.pointers.delete(event.pointerId);
        svg.classList.remove("drag");
      });
    svg.addEventListener("keydown", event => {
      if (event.ctrlKey || event.metaKey || event.altKey) return;
      const step = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, -1], ArrowDown: [0, 1] }[event.key];
      if (event.shiftKey && step) this.go({ ...this.at, x: this.at.x + step[0] * this.at.w / 8, y: this.at.y + step[1] * this.at.w / 8 });
      else if (event.key === "+" || event.key === "=") this.zoom(1.5, this.anchor);
      else if (event.key === "-" || event.key === "_") this.zoom(1 / 1.5, this.anchor);
      else if (event.key === "0" || event.key === "f") this.fit(true);
      else if (!onStep(event)) return;
      event.preventDefault();
    });
  }

  // width in picture units that fits a box into the element
  wide(w, h) {
    const box = this.svg.getBoundingClientRect();
    this.px = Math.max(box.width, 1);
    this.ratio = Math.max(box.height, 1) / this.px;
    return Math.max(w, h / this.ratio);
  }

  fit(moving) { this.go({ x: this.home.x, y: this.home.y, w: this.wide(this.home.w, this.home.h) }, !moving); }

  zoom(factor, place) {
    const whole = this.wide(this.home.w, this.home.h);
    const w = Math.min(Math.max(this.at.w / factor, whole / 2000), whole * 4), share = w / this.at.w;
    const about = place || { x: this.at.x, y: this.at.y };
    this.go({ x: about.x + (this.at.x - about.x) * share, y: about.y + (this.at.y - about.y) * share, w }, true);
  }

  go(to, at_once) {
    cancelAnimationFrame(this.frame);
    if (at_once || calm.matches || !this.at) { this.at = to; this.draw(); return; }
    const from = this.at, begin = performance.now();
    const tick = now => {
      const t = Math.min((now - begin) / 260, 1), ease = t * t * (3 - 2 * t);
      const w = from.w * Math.pow(to.w / from.w, ease), share = Math.abs(to.w - from.w) < 1e-9 * to.w ? ease : (w - from.w) / (to.w - from.w);
      this.at = { x: from.x + (to.x - from.x) * share, y: from.y + (to.y - from.y) * share, w };
      this.draw();
      if (t < 1) this.frame = requestAnimationFrame(tick);
    };
    this.frame = requestAnimationFrame(tick);
  }

  // width: that of the paper while printing
  draw(width) {
    this.wide(1, 1);
    const { x, y, w } = this.at, h = w * this.ratio, unit = width ? Math.max(w / width, h / (0.52 * width)) : w / this.px;
    this.svg.setAttribute("viewBox", [x - w / 2, y - h / 2, w, h].map(value => value.toFixed(2)).join(" "));
    const shown = [];
    for (const mark of this.still) {
      mark.node.setAttribute("transform", `translate(${mark.x} ${mark.y}) scale(${unit})`);
      const covered = shown.some(other => Math.hypot(other.x - mark.x, other.y - mark.y) < 18 * unit);
      mark.node.classList.toggle("covered", covered);
      if (!covered) shown.push(mark);
    }
    if (this.anchor) this.cursor(this.anchor.x, this.anchor.y, unit);
  }

  cursor(x, y, unit = this.at.w / this.px) {
    const node = this.svg.querySelector("#cursor");
    this.anchor = { x, y };
    node.removeAttribute("hidden");
    node.setAttribute("transform", `translate(${x} ${y}) scale(${unit})`);
  }

  // keep a place in sight
  reveal(x, y) {
    const h = this.at.w * this.ratio;
    if (Math.abs(x - this.at.x) > 0.47 * this.at.w || Math.abs(y - this.at.y) > 0.47 * h) this.go({ x, y, w: this.at.w });
  }

  place(event) {
    const box = this.svg.getBoundingClientRect(), unit = this.at.w / this.px;
    return { x: this.at.x + (event.clientX - box.left - box.width / 2) * unit, y: this.at.y + (event.clientY - box.top - box.height / 2) * unit, unit };
  }

  drag(event, onPoint) {
    const before = this.pointers.get(event.pointerId);
    if (!before) { onPoint(this.place(event)); return; }
    const others = Array.from(this.pointers.values()).filter(other => other.pointerId !== event.pointerId);
    const unit = this.at.w / this.px;
    if (others.length) {
      const size = one => Math.hypot(one.clientX - others[0].clientX, one.clientY - others[0].clientY) || 1;
      const middle = { clientX: (event.clientX + others[0].clientX) / 2, clientY: (event.clientY + others[0].clientY) / 2 };
      this.zoom(size(event) / size(before), this.place(middle));
    }
    const share = others.length ? 0.5 : 1, dx = event.clientX - before.clientX, dy = event.clientY - before.clientY;
    if (Math.abs(dx) + Math.abs(dy) > 0) this.moved = true;
    this.svg.classList.add("drag");
    this.go({ ...this.at, x: this.at.x - dx * unit * share, y: this.at.y - dy * unit * share }, true);
    this.pointers.set(event.pointerId, event);
  }
}

class Strip {
  // A chart of values along a profile. colours: class names between edges, from below.
  constructor(svg, onPlace, onStep) {
    this.svg = svg;
    this.shown = null;
    new ResizeObserver(() => this.draw()).observe(svg);
    addEventListener("beforeprint", () => this.draw(PAPER));
    addEventListener("afterprint", () => this.draw());
    svg.addEventListener("pointermove", event => { if (this.shown) onPlace(this.along(event)); });
    svg.addEventListener("pointerdown", event => { if (this.shown) onPlace(this.along(event)); });
    svg.addEventListener("keydown", event => { if (!event.ctrlKey && !event.metaKey && !event.altKey && onStep(event)) event.preventDefault(); });
  }

  along(event) {
    const box = this.svg.getBoundingClientRect();
    return (event.clientX - box.left - this.left) / (box.width - this.left - 10) * this.shown.length;
  }

  // shown: {length, a, d, edges, limits, zones: [[from, to]], unit}
  show(shown) { this.shown = shown; this.index = null; this.draw(); }

  draw(width) {
    const box = this.svg.getBoundingClientRect(), shown = this.shown;
    if (!shown || !shown.a.length || box.width < 20) return;
    const w = this.w = width || Math.round(box.width), h = this.h = width ? 170 : Math.round(box.height), bottom = h - 22, top = 10;
    this.left = 64;
    this.svg.setAttribute("viewBox", `0 0 ${w} ${h}`);
    this.svg.replaceChildren();
    let low = 0, high = 0;
    for (const d of shown.d) { low = Math.min(low, d); high = Math.max(high, d); }
    if (shown.limits) { low = Math.min(low, shown.space ? 0 : shown.limits[0]); high = Math.max(high, shown.limits[1]); }
    if (!(high > low)) { low = -1; high = 1; }
    const spare = 0.06 * (high - low);
    if (low < 0) low -= spare;
    high += spare;
    const x = this.x = a => this.left + (w - this.left - 10) * a / (shown.length || 1);
    const y = this.y = d => bottom - (bottom - top) * (d - low) / (high - low);
    const fade = element(element(this.svg, "defs", {}), "linearGradient", { id: "bands", gradientUnits: "userSpaceOnUse", x1: 0, x2: 0, y1: y(low), y2: y(high) });
    const stop = (d, band) => element(fade, "stop", { offset: Math.min(Math.max((d - low) / (high - low), 0), 1), style: `stop-color: var(--b${band})` });
    const ends = [-Infinity, ...shown.edges, Infinity];
    for (let k = 0; k + 1 < ends.length; k++)
      if (ends[k + 1] > low && ends[k] < high) { stop(ends[k], k); stop(ends[k + 1], k); }
    for (const zone of shown.zones)
      for (const turn of [0, shown.length]) {
        const from = Math.max(zone[0] - turn, 0), to = Math.min(zone[1] - turn, shown.length);
        if (to > from) element(this.svg, "rect", { class: "zone", x: x(from), width: Math.max(x(to) - x(from), 1.5), y: top, height: bottom - top });
      }
    for (const a of steps(0, shown.length || 1, Math.max(w / 140, 2))) {
      element(this.svg, "path", { class: "axis", d: `M${x(a)} ${top}V${bottom}` });
      element(this.svg, "text", { x: x(a), y: h - 7, "text-anchor": x(a) > w - 30 ? "end" : "middle" }, figure(a));
    }
    const taken = [];
    const tick = (d, kind, text) => {
      element(this.svg, "path", { class: kind, d: `M${this.left} ${y(d)}H${w - 10}` });
      if (taken.some(other => Math.abs(other - y(d)) < 13)) return;
      taken.push(y(d));
      element(this.svg, "text", { class: kind === "limit" ? "limit" : "", x: this.left - 6, y: y(d) + 4, "text-anchor": "end" }, text);
    };
    if (shown.limits) for (const d of shown.limits) if (d > 0 || !shown.space) tick(d, "limit", figure(d, true));
    tick(0, "zero", "0");
    for (const d of steps(low, high, 4)) if (d) tick(d, "axis", figure(d, true));
    const line = shown.a.map((a, k) => `${k ? "L" : "M"}${x(a).toFixed(1)} ${y(shown.d[k]).toFixed(1)}`).join("");
    element(this.svg, "path", { class: "line", d: line, stroke: "url(#bands)" });
    if (this.index !== null) this.mark(this.index);
  }

  mark(index) {
    this.index = index;
    if (!this.x) return;
    for (const node of this.svg.querySelectorAll(".now, .dot")) node.remove();
    const a = this.x(this.shown.a[index]);
    element(this.svg, "path", { class: "now", d: `M${a} 8V${this.h - 22}` });
    element(this.svg, "circle", { class: "dot", cx: a, cy: this.y(this.shown.d[index]), r: 4 });
  }
}
