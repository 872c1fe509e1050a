// The map of the field: tracks at a moment, the detections of the nearest epoch, confused
// groups. North is up and east to the left, as on the sky. Drawn on a canvas because a field
// has thousands of stars; everything the mouse does has a key.

function makeMap(run, hooks) {
  const T = run.T;
  const canvas = h("canvas", {
    class: "sky", tabindex: "0", role: "application",
    "aria-label": "Map of the field. Arrow keys move, plus and minus zoom, 0 shows everything, n and p go from star to star, Enter opens the page of the star.",
  });
  const tip = h("div", { class: "tip", hidden: true });
  const root = h("div", { class: "mapbox" }, canvas, tip);
  const view = { cx: 0, cy: 0, scale: 1, t: run.header.reference_yr };
  const layers = { paths: true, detections: true, all: false, groups: true, names: true, calm: true };
  let selected = -1;
  let hovered = null;
  let colours = {};
  let size = { w: 0, h: 0, dpr: 1 };
  let waiting = false;
  let fitted = false;
  const still = document.createElement("canvas");
  let stillKey = "";

  const mags = T.mag.filter((m) => m !== null).slice().sort((a, b) => a - b);
  const [bright, faint] = [mags[Math.floor(mags.length * 0.02)] ?? 0, mags[Math.floor(mags.length * 0.98)] ?? 1];
  const radius = T.mag.map((m) => {
    const share = m === null ? 0 : (faint - m) / Math.max(0.5, faint - bright);
    return 1.6 + 3.2 * Math.min(1, Math.max(0, share));
  });
  const confused = T.flags.map((_, k) => run.isConfused(k));
  const paths = T.name.map((_, k) => {
    const [t0, t1] = [T.first_yr[k], T.last_yr[k]];
    return Float64Array.from(run.pathTimes(k, t0, t1).flatMap((t) => run.place(k, t)));
  });
  const now = { x: new Float64Array(run.nTracks), y: new Float64Array(run.nTracks), t: NaN };
  const home = bounds();

  function bounds() {
    let [x0, x1, y0, y1] = [Infinity, -Infinity, Infinity, -Infinity];
    for (const p of T.mean) {
      x0 = Math.min(x0, p[0]); x1 = Math.max(x1, p[0]);
      y0 = Math.min(y0, p[1]); y1 = Math.max(y1, p[1]);
    }
    if (x0 > x1) [x0, x1, y0, y1] = [-1, 1, -1, 1];
    const pad = Math.max(20, 0.04 * Math.max(x1 - x0, y1 - y0));
    return { x0: x0 - pad, x1: x1 + pad, y0: y0 - pad, y1: y1 + pad };
  }

  const px = (x) => size.w / 2 - (x - view.cx) * view.scale;
  const py = (y) => size.h / 2 - (y - view.cy) * view.scale;
  const mx = (p) => view.cx - (p - size.w / 2) / view.scale;
  const my = (p) => view.cy - (p - size.h / 2) / view.scale;

  function fit() {
    view.cx = (home.x0 + home.x1) / 2;
    view.cy = (home.y0 + home.y1) / 2;
    view.scale = Math.min(size.w / (home.x1 - home.x0), size.h / (home.y1 - home.y0));
    redraw();
  }

  function measure() {
    const rect = root.getBoundingClientRect();
    if (rect.width < 2) return;
    size = { w: rect.width, h: rect.height, dpr: Math.min(2, window.devicePixelRatio || 1) };
    canvas.width = Math.round(size.w * size.dpr);
    canvas.height = Math.round(size.h * size.dpr);
    if (!fitted) { fitted = true; fit(); } else redraw();
  }
  new ResizeObserver(measure).observe(root);

  function readColours() {
    const style = getComputedStyle(document.documentElement);
    for (const name of ["paper", "ink", "muted", "rule", "calm", "doubt", "merged", "chosen", "free"]) {
      colours[name] = style.getPropertyValue("--" + name).trim();
    }
  }

  function redraw() {
    if (waiting) return;
    waiting = true;
    requestAnimationFrame(() => { waiting = false; draw(); });
  }

  function locate() {
    if (now.t === view.t) return;
    now.t = view.t;
    for (let k = 0; k < run.nTracks; k++) [now.x[k], now.y[k]] = run.place(k, view.t);
  }

  const alive = (k) => view.t >= T.first_yr[k] - 0.5 && view.t <= T.last_yr[k] + 0.5;
  const drawn = (k) => layers.calm || confused[k] || k === selected;
  const visible = (x, y, pad) => x > -pad && y > -pad && x < size.w + pad && y < size.h + pad;

  function draw() {
    if (!size.w) return;
    if (!colours.paper) readColours();
    locate();
    const g = canvas.getContext("2d");
    const epoch = run.nearestEpoch(view.t);
    drawStill();
    g.setTransform(1, 0, 0, 1, 0, 0);
    g.drawImage(still, 0, 0);
    g.setTransform(size.dpr, 0, 0, size.dpr, 0, 0);
    if (layers.groups) drawGroups(g);
    drawOutline(g, epoch);
    drawCentre(g);
    drawStars(g);
    if (layers.detections) drawDetections(g, epoch);
    drawSelected(g);
    if (layers.names) drawNames(g);
    drawScale(g);
    hooks.drawn(view, epoch);
  }

  // What does not change with time is kept until the view changes.
  function drawStill() {
    const key = JSON.stringify([view.cx, view.cy, view.scale, size, layers.all, layers.paths, layers.calm, colours.paper]);
    if (key === stillKey) return;
    stillKey = key;
    if (still.width !== canvas.width || still.height !== canvas.height) {
      still.width = canvas.width;
      still.height = canvas.height;
    }
    const g = still.getContext("2d");
    g.setTransform(size.dpr, 0, 0, size.dpr, 0, 0);
    g.fillStyle = colours.paper;
    g.fillRect(0, 0, size.w, size.h);
    if (layers.all) drawEveryDetection(g);
    if (layers.paths) drawPaths(g);
  }

  function drawOutline(g, epoch) {
    const outline = run.epochs[epoch].outline_mas;
    g.strokeStyle = colours.rule;
    g.lineWidth = 1;
    g.setLineDash([4, 4]);
    g.beginPath();
    outline.forEach(([x, y], k) => (k ? g.lineTo(px(x), py(y)) : g.moveTo(px(x), py(y))));
    g.closePath();
    for (const [x, y, r] of run.epochs[epoch].holes_mas) {
      g.moveTo(px(x) + r * view.scale, py(y));
      g.arc(px(x), py(y), r * view.scale, 0, 2 * Math.PI);
    }
    g.stroke();
    g.setLineDash([]);
  }

  // Hundreds of thousands of points: pixels are set directly.
  function drawEveryDetection(g) {
    const [w, hgt] = [still.width, still.height];
    const image = g.getImageData(0, 0, w, hgt);
    const pixels = new Uint32Array(image.data.buffer);
    const probe = document.createElement("canvas").getContext("2d");
    probe.fillStyle = colours.muted;
    probe.fillRect(0, 0, 1, 1);
    const colour = new Uint32Array(probe.getImageData(0, 0, 1, 1).data.buffer)[0];
    const s = view.scale * size.dpr;
    const [ox, oy] = [w / 2 + view.cx * s, hgt / 2 + view.cy * s];
    for (let d = 0; d < run.nDet; d++) {
      const x = Math.round(ox - run.x(d) * s);
      const y = Math.round(oy - run.y(d) * s);
      if (x < 0 || y < 0 || x >= w - 1 || y >= hgt - 1) continue;
      pixels[y * w + x] = colour;
      if (size.dpr > 1) {
        pixels[y * w + x + 1] = colour;
        pixels[(y + 1) * w + x] = colour;
        pixels[(y + 1) * w + x + 1] = colour;
      }
    }
    g.putImageData(image, 0, 0);
  }

  function drawGroups(g) {
    g.globalAlpha = 0.2;
    g.fillStyle = colours.doubt;
    for (const tangle of run.header.tangles) {
      // The outline of a very large group would only hide the field.
      if (tangle.tracks.length > 40 || tangle.tracks.length < 2) continue;
      const points = tangle.tracks.filter(alive).map((k) => [px(now.x[k]), py(now.y[k])]);
      if (!points.some(([x, y]) => visible(x, y, 30))) continue;
      g.beginPath();
      traceAround(g, hull(points), 10);
      g.fill();
    }
    g.globalAlpha = 1;
  }

  function strokePaths(g, wanted) {
    g.beginPath();
    for (let k = 0; k < run.nTracks; k++) {
      if (!wanted(k)) continue;
      tracePath(g, paths[k]);
    }
    g.stroke();
  }

  function tracePath(g, path) {
    const n = path.length;
    const [xa, ya, xb, yb] = [px(path[0]), py(path[1]), px(path[n - 2]), py(path[n - 1])];
    const margin = n > 4 ? 400 : 0;
    if (Math.max(xa, xb) < -margin || Math.min(xa, xb) > size.w + margin) return;
    if (Math.max(ya, yb) < -margin || Math.min(ya, yb) > size.h + margin) return;
    g.moveTo(xa, ya);
    for (let i = 2; i < n; i += 2) g.lineTo(px(path[i]), py(path[i + 1]));
  }

  function drawPaths(g) {
    g.lineWidth = 1;
    g.globalAlpha = 0.55;
    if (layers.calm) {
      g.strokeStyle = colours.calm;
      strokePaths(g, (k) => !confused[k]);
    }
    g.strokeStyle = colours.doubt;
    g.globalAlpha = 0.75;
    strokePaths(g, (k) => confused[k]);
    g.globalAlpha = 1;
  }

  function drawCentre(g) {
    const c = run.header.central;
    if (!c) return;
    const [x, y] = [px(c.x_mas), py(c.y_mas)];
    g.strokeStyle = colours.ink;
    g.lineWidth = 1.5;
    g.beginPath();
    for (const [ux, uy] of [[1, 0], [-1, 0], [0, 1], [0, -1]]) {
      g.moveTo(x + 4 * ux, y + 4 * uy);
      g.lineTo(x + 11 * ux, y + 11 * uy);
    }
    g.stroke();
  }

  // Discs, filled while the track has detections around this time, hollow when extrapolated.
  // One call per disc: browsers draw single circles far quicker than one path of thousands.
  function drawStars(g) {
    g.lineWidth = 1;
    for (const [isConfused, colour] of [[false, colours.calm], [true, colours.doubt]]) {
      g.fillStyle = colour;
      g.strokeStyle = colour;
      for (let k = 0; k < run.nTracks; k++) {
        if (confused[k] !== isConfused || !drawn(k)) continue;
        const [x, y] = [px(now.x[k]), py(now.y[k])];
        if (!visible(x, y, 6)) continue;
        const here = alive(k);
        if (!here && Math.min(Math.abs(view.t - T.first_yr[k]), Math.abs(view.t - T.last_yr[k])) > 3) continue;
        g.beginPath();
        g.arc(x, y, starRadius(k), 0, 2 * Math.PI);
        if (here) g.fill();
        else g.stroke();
      }
    }
  }

  const starRadius = (k) => radius[k] * Math.min(1.6, Math.max(0.75, 0.8 + 0.25 * Math.log10(view.scale * 10)));

  function drawDetections(g, epoch) {
    g.lineWidth = 1.2;
    const [own, ring, cross] = [new Path2D(), new Path2D(), new Path2D()];
    const big = view.scale > 0.35;
    for (let d = run.epochStart[epoch]; d < run.epochStart[epoch + 1]; d++) {
      const [x, y] = [px(run.x(d)), py(run.y(d))];
      if (!visible(x, y, 6)) continue;
      const n = run.nHolders(d);
      if (n === 0) {
        const s = big ? 3.5 : 2;
        cross.moveTo(x - s, y - s); cross.lineTo(x + s, y + s);
        cross.moveTo(x - s, y + s); cross.lineTo(x + s, y - s);
      } else if (n > 1) {
        const s = big ? 7 : 4;
        ring.moveTo(x + s, y); ring.arc(x, y, s, 0, 2 * Math.PI);
        ring.moveTo(x + s - 3, y); ring.arc(x, y, s - 3, 0, 2 * Math.PI);
      } else if (big) {
        own.moveTo(x + 5, y); own.arc(x, y, 5, 0, 2 * Math.PI);
      }
    }
    g.strokeStyle = colours.ink; g.globalAlpha = 0.55; g.stroke(own); g.globalAlpha = 1;
    g.strokeStyle = colours.merged; g.stroke(ring);
    g.strokeStyle = colours.free; g.stroke(cross);
  }

  function drawSelected(g) {
    if (selected < 0) return;
    g.strokeStyle = colours.chosen;
    g.lineWidth = 2.5;
    g.beginPath();
    tracePath(g, paths[selected]);
    g.stroke();
    g.fillStyle = colours.chosen;
    for (let m = run.trackStart[selected]; m < run.trackStart[selected + 1]; m++) {
      const d = run.detOfMem[m];
      g.fillRect(px(run.x(d)) - 1.5, py(run.y(d)) - 1.5, 3, 3);
    }
    const [x, y] = [px(now.x[selected]), py(now.y[selected])];
    g.beginPath();
    g.arc(x, y, 11, 0, 2 * Math.PI);
    for (const a of [0.25, 0.75, 1.25, 1.75]) {
      g.moveTo(x + 11 * Math.cos(a * Math.PI), y + 11 * Math.sin(a * Math.PI));
      g.lineTo(x + 17 * Math.cos(a * Math.PI), y + 17 * Math.sin(a * Math.PI));
    }
    g.stroke();
  }

  function drawNames(g) {
    const list = [];
    for (let k = 0; k < run.nTracks && list.length <= 60; k++) {
      if (!drawn(k) || !alive(k)) continue;
      const [x, y] = [px(now.x[k]), py(now.y[k])];
      if (visible(x, y, 0)) list.push([k, x, y]);
    }
    g.font = "12px " + FONT;
    g.textBaseline = "middle";
    const write = (k, x, y) => {
      g.lineWidth = 3;
      g.strokeStyle = colours.paper;
      g.strokeText(T.name[k], x + 10, y - 9);
      g.fillStyle = k === selected ? colours.chosen : colours.ink;
      g.fillText(T.name[k], x + 10, y - 9);
    };
    if (list.length <= 60) list.forEach(([k, x, y]) => k !== selected && write(k, x, y));
    if (selected >= 0) write(selected, px(now.x[selected]) + 6, py(now.y[selected]) - 6);
  }

  function drawScale(g) {
    const wanted = Math.min(160, size.w / 4) / view.scale;
    const power = 10 ** Math.floor(Math.log10(wanted));
    const length = [5, 2, 1].map((f) => f * power).find((v) => v <= wanted) || power;
    const text = length >= 1000 ? `${length / 1000} arcsec` : `${length} mas`;
    const [x, y] = [16, size.h - 16];
    g.strokeStyle = colours.ink;
    g.fillStyle = colours.ink;
    g.lineWidth = 1.5;
    g.font = "12px " + FONT;
    g.textBaseline = "alphabetic";
    g.beginPath();
    g.moveTo(x, y - 4); g.lineTo(x, y); g.lineTo(x + length * view.scale, y); g.lineTo(x + length * view.scale, y - 4);
    // North and east.
    const [cx, cy] = [size.w - 24, size.h - 18];
    g.moveTo(cx - 22, cy); g.lineTo(cx, cy); g.lineTo(cx, cy - 22);
    g.stroke();
    g.fillText(text, x + 4, y - 8);
    g.fillText("N", cx - 4, cy - 27);
    g.fillText("E", cx - 34, cy + 4);
  }

  // What lies under a place of the screen: a track, or a detection of the shown epoch.
  function hit(x, y) {
    let best = null;
    let nearest = 14 * 14;
    for (let k = 0; k < run.nTracks; k++) {
      if (!drawn(k)) continue;
      const d2 = (px(now.x[k]) - x) ** 2 + (py(now.y[k]) - y) ** 2;
      if (d2 < nearest) { nearest = d2; best = { track: k }; }
    }
    if (layers.detections) {
      const epoch = run.nearestEpoch(view.t);
      for (let d = run.epochStart[epoch]; d < run.epochStart[epoch + 1]; d++) {
        const d2 = (px(run.x(d)) - x) ** 2 + (py(run.y(d)) - y) ** 2;
        if (d2 < nearest * 0.7) { nearest = d2 / 0.7; best = { det: d }; }
      }
    }
    return best;
  }

  function tipText(what) {
    if (what.det !== undefined) {
      const d = what.det;
      const names = Array.from(run.holders(d), (m) => T.name[run.trackOfMem[m]]);
      return [
        `detection ${run.detName(d)}`,
        `${fixed(run.x(d), 1)}, ${fixed(run.y(d), 1)} mas` + (run.mag(d) === null ? "" : `, mag ${fixed(run.mag(d), 2)}`),
        names.length ? (names.length > 1 ? "merged: " : "") + names.join(", ") : "in no track",
      ];
    }
    const k = what.track;
    return [
      T.name[k] + (T.mag[k] === null ? "" : `, mag ${fixed(T.mag[k], 2)}`),
      `${T.n_members[k]} detections, probability ${probabilityText(T.probability[k])}`,
      run.flagWords(T.flags[k]).join(", "),
    ].filter(Boolean);
  }

  function hover(event) {
    const rect = canvas.getBoundingClientRect();
    const [x, y] = [event.clientX - rect.left, event.clientY - rect.top];
    hovered = hit(x, y);
    tip.hidden = !hovered;
    canvas.style.cursor = hovered ? "pointer" : "grab";
    if (!hovered) return;
    tip.replaceChildren(...tipText(hovered).map((line) => h("div", {}, line)));
    tip.style.left = Math.min(x + 14, size.w - tip.offsetWidth - 6) + "px";
    tip.style.top = Math.max(4, Math.min(y + 14, size.h - tip.offsetHeight - 6)) + "px";
  }

  function zoom(factor, x = size.w / 2, y = size.h / 2) {
    const [wx, wy] = [mx(x), my(y)];
    view.scale = Math.min(500, Math.max(0.2 * Math.min(size.w / (home.x1 - home.x0), size.h / (home.y1 - home.y0)), view.scale * factor));
    view.cx = wx + (x - size.w / 2) / view.scale;
    view.cy = wy + (y - size.h / 2) / view.scale;
    redraw();
  }

  function pan(dx, dy) {
    view.cx += dx / view.scale;
    view.cy += dy / view.scale;
    redraw();
  }

  // One finger or the mouse drags, two fingers zoom.
  const pointers = new Map();
  let moved = 0;
  canvas.addEventListener("pointerdown", (event) => {
    canvas.setPointerCapture(event.pointerId);
    pointers.set(event.pointerId, [event.clientX, event.clientY]);
    moved = 0;
  });
  canvas.addEventListener("pointermove", (event) => {
    const before = pointers.get(event.pointerId);
    if (!before) { hover(event); return; }
    const after = [event.clientX, event.clientY];
    if (pointers.size === 1) pan(after[0] - before[0], after[1] - before[1]);
    else {
      const other = [...pointers].find(([id]) => id !== event.pointerId)[1];
      const span = (p) => Math.hypot(p[0] - other[0], p[1] - other[1]) || 1;
      const rect = canvas.getBoundingClientRect();
      zoom(span(after) / span(before), (after[0] + other[0]) / 2 - rect.left, (after[1] + other[1]) / 2 - rect.top);
    }
    moved += Math.abs(after[0] - before[0]) + Math.abs(after[1] - before[1]);
    pointers.set(event.pointerId, after);
  });
  const release = (event) => {
    if (pointers.delete(event.pointerId) && event.type === "pointerup" && moved < 5) {
      hover(event);
      const holder = hovered && hovered.det !== undefined ? run.holders(hovered.det)[0] : undefined;
      select(!hovered ? -1 : hovered.track ?? (holder === undefined ? -1 : run.trackOfMem[holder]));
    }
  };
  canvas.addEventListener("pointerup", release);
  canvas.addEventListener("pointercancel", release);
  canvas.addEventListener("pointerleave", () => { tip.hidden = true; });
  canvas.addEventListener("dblclick", () => selected >= 0 && hooks.open(selected));
  canvas.addEventListener("wheel", (event) => {
    event.preventDefault();
    const rect = canvas.getBoundingClientRect();
    zoom(Math.exp(-event.deltaY * (event.deltaMode ? 0.05 : 0.0016)), event.clientX - rect.left, event.clientY - rect.top);
  }, { passive: false });
  canvas.addEventListener("keydown", (event) => {
    const step = 60;
    const keys = {
      ArrowLeft: () => pan(step, 0), ArrowRight: () => pan(-step, 0),
      ArrowUp: () => pan(0, step), ArrowDown: () => pan(0, -step),
      "+": () => zoom(1.4), "=": () => zoom(1.4), "-": () => zoom(1 / 1.4), "0": fit,
      n: () => walk(1), p: () => walk(-1), Escape: () => select(-1),
      Enter: () => selected >= 0 && hooks.open(selected),
    };
    if (!keys[event.key] || event.ctrlKey || event.metaKey) return;
    event.preventDefault();
    event.stopPropagation();
    keys[event.key]();
  });

  // To the next or previous star in view (the order of the tables: brightest first).
  function walk(step) {
    for (let i = 1; i <= run.nTracks; i++) {
      const start = selected < 0 ? (step > 0 ? -1 : 0) : selected;
      const k = (((start + step * i) % run.nTracks) + run.nTracks) % run.nTracks;
      if (drawn(k) && visible(px(now.x[k]), py(now.y[k]), 0)) { select(k); return; }
    }
  }

  function select(k) {
    selected = k;
    hooks.selected(k);
    redraw();
  }

  return {
    root, canvas, view, layers, redraw, fit, zoom, select,
    selected: () => selected,
    setTime: (t) => { view.t = t; redraw(); },
    retheme: () => { readColours(); redraw(); },
    goTo: (k) => {
      locate();
      [view.cx, view.cy] = alive(k) ? [now.x[k], now.y[k]] : T.mean[k];
      view.scale = Math.max(view.scale, 2);
      select(k);
    },
  };
}

// The outline of everything within a distance of a convex ring (in the sense of `hull`).
function traceAround(g, ring, distance) {
  const n = ring.length;
  if (n < 2) {
    if (n) { g.moveTo(ring[0][0] + distance, ring[0][1]); g.arc(...ring[0], distance, 0, 2 * Math.PI); }
    return;
  }
  const angle = (a, b) => Math.atan2(a[0] - b[0], b[1] - a[1]);
  for (let k = 0; k < n; k++) {
    const [before, at, after] = [ring[(k + n - 1) % n], ring[k], ring[(k + 1) % n]];
    const [from, to] = [angle(before, at), angle(at, after)];
    if (k === 0) g.moveTo(at[0] + distance * Math.cos(from), at[1] + distance * Math.sin(from));
    g.arc(at[0], at[1], distance, from, to);
  }
  g.closePath();
}

// Convex hull (Andrew 1979, monotone chain).
function hull(points) {
  const sorted = points.slice().sort((a, b) => a[0] - b[0] || a[1] - b[1]);
  if (sorted.length < 3) return sorted;
  const turn = (o, a, b) => (a[0] - o[0]) * (b[1] - o[1]) - (a[1] - o[1]) * (b[0] - o[0]);
  const half = (list) => {
    const chain = [];
    for (const p of list) {
      while (chain.length > 1 && turn(chain[chain.length - 2], chain[chain.length - 1], p) <= 0) chain.pop();
      chain.push(p);
    }
    chain.pop();
    return chain;
  };
  return half(sorted).concat(half(sorted.reverse()));
}
