(() => {
  const byId = id => document.getElementById(id);
  const map = byId("map"), readout = byId("readout"), chooser = byId("profile"), stripSvg = byId("strip");
  const toPicture = (x, y) => [x * DATA.scale, -y * DATA.scale];
  let pair = DATA.order.length ? DATA.order[0] : null, index = 0;

  function step(event) {
    if (pair === null) return false;
    const count = DATA.pairs[pair].a.length, closed = DATA.pairs[pair].closed;
    const large = Math.max(1, Math.round(count / 20));
    const by = { ArrowRight: 1, ArrowUp: 1, ArrowLeft: -1, ArrowDown: -1, PageUp: large, PageDown: -large }[event.key];
    if (event.key === "Home") set(pair, 0, true);
    else if (event.key === "End") set(pair, count - 1, true);
    else if (by) set(pair, closed ? (index + by + count) % count : Math.min(Math.max(index + by, 0), count - 1), true);
    else return false;
    return true;
  }

  const view = new View(map, place => point(place), step);
  const strip = stripSvg ? new Strip(stripSvg, along => set(pair, nearestAlong(pair, along), false), step) : null;

  function nearestAlong(k, along) {
    const a = DATA.pairs[k].a;
    let low = 0, high = a.length - 1;
    while (high - low > 1) {
      const middle = (low + high) >> 1;
      if (a[middle] < along) low = middle; else high = middle;
    }
    return along - a[low] < a[high] - along ? low : high;
  }

  function point(place) {
    let best = 30 * place.unit / DATA.scale, found = null;
    best *= best;
    const x = place.x / DATA.scale, y = -place.y / DATA.scale;
    DATA.pairs.forEach((one, k) => {
      for (let i = 0; i < one.a.length; i++) {
        const dx = one.x[i] - x, dy = one.y[i] - y, d = dx * dx + dy * dy;
        if (d < best) { best = d; found = [k, i]; }
      }
    });
    if (found) set(found[0], found[1], false);
  }

  function take(k) {
    pair = k;
    chooser.value = String(k);
    const one = DATA.pairs[k];
    byId("strip-name").textContent = "(" + one.name + ")";
    strip.show({ length: one.length, a: one.a, d: one.d, edges: DATA.edges, limits: DATA.limits, space: one.space,
      zones: DATA.zones.filter(zone => zone.pair === k && !zone.old).map(zone => [zone.from, zone.to]) });
    stripSvg.setAttribute("aria-valuemax", one.length);
  }

  function set(k, i, reveal) {
    const one = DATA.pairs[k];
    if (!one.a.length) return;
    if (k !== pair || strip.shown === null) take(k);
    index = i;
    const d = one.d[i], place = toPicture(one.x[i], one.y[i]);
    view.cursor(place[0], place[1]);
    if (reveal) view.reveal(place[0], place[1]);
    strip.mark(i);
    const side = one.space || !d ? "" : one.closed ? (d > 0 ? " outside" : " inside") : (d > 0 ? " left" : " right");
    const state = DATA.limits === null ? "" : d > DATA.limits[1] || d < DATA.limits[0] ? ", out of tolerance" : ", within";
    const said = [["deviation", figure(d, !one.space) + DATA.unit + side + state],
      ["along", figure6(one.a[i]) + " of " + figure6(one.length) + DATA.unit],
      ["x, y", coordinate(one.x[i] + DATA.x) + ", " + coordinate(one.y[i] + DATA.y)], ["profile", one.name]];
    readout.replaceChildren(...said.flatMap(([word, text], n) => {
      const strong = document.createElement("b");
      strong.textContent = text;
      return [(n ? " \u00b7 " : "") + word + " ", strong];
    }));
    stripSvg.setAttribute("aria-valuenow", one.a[i]);
    stripSvg.setAttribute("aria-valuetext", said.map(item => item.join(" ")).join(", "));
  }

  const figure6 = value => String(Number(value.toPrecision(6)));
  const coordinate = value => value.toFixed(Math.max(0, DATA.digits - 2)).replace(/^-/, "\u2212");

  function show(zone) {
    const one = DATA.zones[zone], place = toPicture(one.x, one.y);
    if (one.old) {
      if (one.pair !== pair || strip.shown === null) take(one.pair);
      view.cursor(place[0], place[1]);
    } else set(one.pair, nearestAlong(one.pair, one.along), false);
    const wide = Math.min(Math.max(1.6 * (one.to - one.from), DATA.size / 400), DATA.size) * DATA.scale;
    view.go({ x: place[0], y: place[1], w: view.wide(wide, wide) });
    document.querySelectorAll(".mark").forEach(node => node.classList.toggle("at", node.textContent.trim() === String(zone + 1)));
    map.scrollIntoView({ block: "nearest", behavior: calm.matches ? "auto" : "smooth" });
  }

  byId("closer").addEventListener("click", () => view.zoom(1.5, view.anchor));
  byId("farther").addEventListener("click", () => view.zoom(1 / 1.5, view.anchor));
  byId("fit").addEventListener("click", () => view.fit(true));
  byId("whiskers").addEventListener("change", event => map.classList.toggle("no-hairs", !event.target.checked));
  byId("numbers").addEventListener("change", event => map.classList.toggle("no-marks", !event.target.checked));
  chooser.addEventListener("change", () => { set(+chooser.value, 0, true); });
  document.querySelectorAll(".go").forEach(node => node.addEventListener("click", () => show(+node.dataset.zone)));
  document.querySelectorAll(".take").forEach(node => node.addEventListener("click", () => {
    const one = DATA.pairs[+node.dataset.pair];
    let peak = 0;
    one.d.forEach((d, i) => { if (Math.abs(d) > Math.abs(one.d[peak])) peak = i; });
    set(+node.dataset.pair, peak, true);
    map.scrollIntoView({ block: "nearest", behavior: calm.matches ? "auto" : "smooth" });
  }));
  map.addEventListener("pointerup", event => {
    const mark = document.elementsFromPoint(event.clientX, event.clientY).map(node => node.closest(".mark")).find(Boolean);
    if (mark && !view.moved) show(Number(mark.textContent.trim()) - 1);
  });

  chooser.parentElement.hidden = DATA.pairs.length < 2;
  for (const id of ["closer", "farther", "fit", "whiskers", "numbers"]) byId(id).disabled = false;
  if (pair !== null) { take(pair); if (DATA.zones.length) { const first = DATA.zones.find(zone => zone.pair === pair && !zone.old); if (first) set(pair, nearestAlong(pair, first.along), false); } }
})();
