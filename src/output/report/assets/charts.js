// Small charts in SVG. Everything takes its colour from the style sheet, so that charts follow
// the theme and print in dark ink.

function niceTicks(low, high, wanted) {
  if (!(high > low)) return [low];
  const rough = (high - low) / wanted;
  const power = 10 ** Math.floor(Math.log10(rough));
  const step = [1, 2, 5, 10].map((f) => f * power).find((s) => s >= rough) || 10 * power;
  const ticks = [];
  for (let k = Math.ceil(low / step - 1e-9); k * step <= high + 1e-9 * step; k++) ticks.push(k * step);
  return ticks;
}

function tickText(value, ticks) {
  const step = ticks.length > 1 ? Math.abs(ticks[1] - ticks[0]) : 1;
  return fixed(value, Math.max(0, Math.min(6, -Math.floor(Math.log10(step) + 1e-9))));
}

function extent(values, pad = 0.06, least = 0) {
  let low = Infinity;
  let high = -Infinity;
  for (const v of values) {
    if (!Number.isFinite(v)) continue;
    if (v < low) low = v;
    if (v > high) high = v;
  }
  if (low > high) return [-1, 1];
  const grow = Math.max((high - low) * pad, (least - (high - low)) / 2, 1e-9);
  return [low - grow, high + grow];
}

// Axes and a clipped area to draw in. Options: title, xLabel, yLabel, x: [low, high],
// y: [low, high], flipX, flipY, width, height, equal (same scale on both axes).
function frame(options) {
  const { title, xLabel, yLabel, flipX, flipY, width = 460, height = 230 } = options;
  let [x, y] = [options.x.slice(), options.y.slice()];
  const box = { left: 58, right: width - 18, top: title ? 26 : 10, bottom: height - 36 };
  if (options.equal) [x, y] = equalScale(x, y, box);
  const px = (v) => {
    const share = (v - x[0]) / (x[1] - x[0]);
    return box.left + (flipX ? 1 - share : share) * (box.right - box.left);
  };
  const py = (v) => {
    const share = (v - y[0]) / (y[1] - y[0]);
    return box.bottom - (flipY ? 1 - share : share) * (box.bottom - box.top);
  };
  const id = "clip" + frame.count++;
  const area = svg("g", { "clip-path": `url(#${id})` });
  const xTicks = niceTicks(x[0], x[1], Math.max(2, (box.right - box.left) / 80));
  const yTicks = niceTicks(y[0], y[1], Math.max(2, (box.bottom - box.top) / 28));
  const root = svg("svg", {
    class: "chart", viewBox: `0 0 ${width} ${height}`, role: "img",
    "aria-label": options.describe || title || "",
  },
    svg("defs", {}, svg("clipPath", { id }, svg("rect", {
      x: box.left, y: box.top, width: box.right - box.left, height: box.bottom - box.top,
    }))),
    xTicks.map((t) => [
      svg("line", { class: "grid", x1: px(t), x2: px(t), y1: box.top, y2: box.bottom }),
      svg("text", { class: "tick", x: px(t), y: box.bottom + 14, "text-anchor": "middle" }, tickText(t, xTicks)),
    ]),
    yTicks.map((t) => [
      svg("line", { class: "grid", x1: box.left, x2: box.right, y1: py(t), y2: py(t) }),
      svg("text", { class: "tick", x: box.left - 6, y: py(t) + 3.5, "text-anchor": "end" }, tickText(t, yTicks)),
    ]),
    svg("rect", { class: "edge", x: box.left, y: box.top, width: box.right - box.left, height: box.bottom - box.top }),
    area,
    title ? svg("text", { class: "title", x: box.left, y: 15 }, title) : null,
    svg("text", { class: "label", x: (box.left + box.right) / 2, y: height - 6, "text-anchor": "middle" }, xLabel),
    svg("text", {
      class: "label", "text-anchor": "middle",
      transform: `translate(12 ${(box.top + box.bottom) / 2}) rotate(-90)`,
    }, yLabel));
  return { root, area, px, py, x, y, box };
}
frame.count = 0;

function equalScale(x, y, box) {
  const perX = (x[1] - x[0]) / (box.right - box.left);
  const perY = (y[1] - y[0]) / (box.bottom - box.top);
  const per = Math.max(perX, perY);
  const widen = ([low, high], pixels) => {
    const [middle, half] = [(low + high) / 2, (per * pixels) / 2];
    return [middle - half, middle + half];
  };
  return [widen(x, box.right - box.left), widen(y, box.bottom - box.top)];
}

function polyline(points, attributes) {
  const d = points.map(([x, y], k) => `${k ? "L" : "M"}${x.toFixed(1)} ${y.toFixed(1)}`).join("");
  return svg("path", { d, fill: "none", ...attributes });
}

// The mark of a detection: own, doubtful (hollow), merged (ringed), rival (square), free (cross).
function mark(kind, x, y, attributes = {}) {
  const at = { class: "mark " + kind, ...attributes };
  const g = (...children) => svg("g", { ...at, transform: `translate(${x.toFixed(1)} ${y.toFixed(1)})` }, ...children);
  switch (kind) {
    case "rival": return g(svg("rect", { x: -3, y: -3, width: 6, height: 6 }));
    case "free": return g(svg("path", { d: "M-3 -3L3 3M-3 3L3 -3" }));
    case "missed": return g(svg("path", { d: "M-3 -5L3 -5L0 0Z" }));
    case "merged": return g(svg("circle", { r: 2.6 }), svg("circle", { class: "ring", r: 5 }));
    default: return g(svg("circle", { r: 3 }));
  }
}

function errorBar(frameOf, t, value, error) {
  const x = frameOf.px(t);
  return svg("line", { class: "bar", x1: x, x2: x, y1: frameOf.py(value - error), y2: frameOf.py(value + error) });
}

// Bars of counts. bins: [{low, high, n, title}]
function histogram({ title, xLabel, yLabel, bins, width, height }) {
  const f = frame({
    title, xLabel, yLabel, width, height,
    x: [bins[0].low, bins[bins.length - 1].high],
    y: [0, Math.max(1, ...bins.map((b) => b.n)) * 1.08],
  });
  for (const b of bins) {
    const [xa, xb] = [f.px(b.low), f.px(b.high)];
    f.area.append(svg("rect", {
      class: "column", x: xa + 0.5, width: Math.max(0.5, xb - xa - 1), y: f.py(b.n), height: f.py(0) - f.py(b.n),
    }, svg("title", {}, `${fixed(b.low, 2)} to ${fixed(b.high, 2)}: ${b.n}`)));
  }
  return f.root;
}

function binned(values, wanted = 24) {
  const clean = values.filter((v) => Number.isFinite(v));
  if (!clean.length) return [{ low: 0, high: 1, n: 0 }];
  const [low, high] = extent(clean, 0.001, 1e-3);
  const ticks = niceTicks(low, high, wanted);
  const step = ticks.length > 1 ? ticks[1] - ticks[0] : high - low;
  const first = Math.floor(low / step);
  const bins = [];
  for (let k = first; k * step < high; k++) bins.push({ low: k * step, high: (k + 1) * step, n: 0 });
  for (const v of clean) bins[Math.min(bins.length - 1, Math.max(0, Math.floor(v / step) - first))].n++;
  return bins;
}
