// The lists one by one: how each was placed, and how its stars sit around their predictions.

function epochsPage(run, main) {
  const rows = run.epochs.map((epoch, e) => ({ ...epoch, e }));
  const cell = (key, decimals) => ({ value: (r) => r[key], cell: (r) => fixed(r[key], decimals) });
  put(main, h("h1", {}, "Epochs"), leftOut(run),
    sortedTable({
      label: "Epochs",
      rows,
      pageSize: 200,
      sort: 1,
      columns: [
        { label: "List", text: true, value: (r) => r.name, cell: (r) => h("a", { href: routeOf("epoch", r.e) }, r.name) },
        { label: "Time", unit: "yr", ...cell("time_yr", 4) },
        { label: "Instrument", text: true, value: (r) => r.instrument },
        { label: "Listed", value: (r) => r.n_list },
        { label: "In tracks", value: (r) => r.n_matched },
        { label: "Left over", value: (r) => r.n_unmatched },
        { label: "Rms", unit: "mas", ...cell("rms_mas", 2) },
        { label: "Error factor", ...cell("error_factor", 2) },
        { label: "Error floor", unit: "mas", ...cell("error_floor_mas", 2) },
        { label: "Depth", unit: "mag", ...cell("limit_mag", 2) },
        { label: "Zero point", unit: "mag", ...cell("zero_point_mag", 3) },
        { label: "Frame", text: true, value: (r) => r.frame },
        { label: "Flags", text: true, value: (r) => run.flagWords(r.flags).join(" "), cell: (r) => [flagChips(run, r.flags), r.failed ? h("span", { class: "chip" }, "not placed") : null] },
      ],
    }).element,
    h("h2", {}, "Over the years"),
    h("div", { class: "charts" },
      epochSeries(run, "Residual rms", "rms (mas)", (r) => r.rms_mas),
      epochSeries(run, "Share of each list in tracks", "share", (r) => (r.n_list ? r.n_matched / r.n_list : null), [0, 1.02]),
      epochSeries(run, "Error factor", "factor", (r) => r.error_factor),
      epochSeries(run, "Zero point", "mag", (r) => r.zero_point_mag)));
}

function epochSeries(run, title, yLabel, value, limits) {
  const points = run.epochs.map((r, e) => [r.time_yr, value(r), e]).filter((p) => Number.isFinite(p[1]) && p[1] !== null);
  if (!points.length) return null;
  const f = frame({
    title, xLabel: "time (yr)", yLabel, x: extent(points.map((p) => p[0]), 0.04, 0.5),
    y: limits || extent(points.map((p) => p[1]), 0.1, 0.1 * Math.abs(points[0][1]) + 1e-3), height: 190,
  });
  for (const [t, v, e] of points) {
    const g = mark("sure", f.px(t), f.py(v));
    g.append(svg("title", {}, `${run.epochs[e].name}: ${fixed(v, 3)}`));
    f.area.append(g);
  }
  return f.root;
}

function epochPage(run, main, e) {
  const epoch = run.epochs[e];
  const members = [];
  for (let d = run.epochStart[e]; d < run.epochStart[e + 1]; d++) for (const m of run.holders(d)) members.push({ d, m, alone: run.nHolders(d) === 1 });
  const order = run.byTime.indexOf(e);
  const step = (i, text) => run.byTime[i] !== undefined && h("a", { href: routeOf("epoch", run.byTime[i]) }, text);
  put(main, 
    h("div", { class: "titleline" }, h("h1", {}, epoch.name), h("span", {}, flagChips(run, epoch.flags)),
      h("span", { class: "steps" }, step(order - 1, "‹ earlier"), step(order + 1, "later ›"))),
    epoch.failed ? h("div", { class: "notice" }, h("p", {}, "This list was not placed in the common frame: ", epoch.failed)) : null,
    h("div", { class: "cards" },
      h("section", {}, h("h2", {}, "List"), facts([
        ["Time", fixed(epoch.time_yr, 4), "yr"], ["Instrument", epoch.instrument], epoch.band && ["Band", epoch.band],
        ["Resolution", fixed(epoch.fwhm_mas, 1), "mas"],
        ["Listed", whole(epoch.n_list)], ["In tracks", whole(epoch.n_matched)], ["Left over", whole(epoch.n_unmatched)],
        ["Depth (50 %)", fixed(epoch.limit_mag, 2), "mag"],
      ])),
      h("section", {}, h("h2", {}, "Errors"), facts([
        ["Residual rms", fixed(epoch.rms_mas, 3), "mas"], ["Stated errors times", fixed(epoch.error_factor, 3)],
        ["Common floor", fixed(epoch.error_floor_mas, 3), "mas"],
        ["Zero point", epoch.zero_point_mag === null ? "" : withError(epoch.zero_point_mag, epoch.zero_point_err_mag), "mag"],
      ])),
      h("section", {}, h("h2", {}, "Transformation"), transformTable(epoch))));
  if (!members.length) return;
  put(main, h("h2", {}, "Residuals"), h("div", { class: "charts" },
    residualMap(run, epoch, members), residualHistogram(run, members, 0), residualHistogram(run, members, 1),
    zeroPointChart(run, members)));
}

function transformTable(epoch) {
  const terms = ["1", "u", "v", "u²", "u v", "v²"];
  const used = terms.map((_, k) => k).filter((k) => epoch.coef[0][k] || epoch.coef[1][k]);
  if (!used.length) return h("p", { class: "quiet" }, "none given");
  const text = (v, err) => [Number(v.toPrecision(9)).toString(), err ? h("span", { class: "err" }, " ± " + err.toPrecision(2)) : null];
  return [
    h("p", { class: "quiet" }, `List units (u, v) to mas; kind “${epoch.frame}”, ${epoch.n_anchors} anchors`),
    h("table", {},
      h("thead", {}, h("tr", {}, h("th", {}, "Term"), h("th", { class: "num" }, "x"), h("th", { class: "num" }, "y"))),
      h("tbody", {}, used.map((k) => h("tr", {}, h("td", {}, terms[k]), [0, 1].map((axis) => h("td", { class: "num" }, text(epoch.coef[axis][k], epoch.coef_err[axis][k]))))))),
  ];
}

function median(values) {
  const sorted = values.slice().sort((a, b) => a - b);
  const middle = sorted.length >> 1;
  return sorted.length % 2 ? sorted[middle] : (sorted[middle - 1] + sorted[middle]) / 2;
}

// Arrows of single stars, or of medians in cells when there are many.
function residualMap(run, epoch, members) {
  const clean = members.filter((q) => q.alone);
  let arrows = clean.map(({ d, m }) => ({ x: run.x(d), y: run.y(d), dx: run.dx(m), dy: run.dy(m), n: 1 }));
  const [xs, ys] = [extent(arrows.map((a) => a.x), 0.04), extent(arrows.map((a) => a.y), 0.04)];
  const many = arrows.length > 400;
  if (many) arrows = cellMedians(arrows, xs, ys, 14);
  const f = frame({
    title: many ? "Median residuals in cells" : "Residuals of single stars", xLabel: "x, east (mas)", yLabel: "y, north (mas)",
    flipX: true, equal: true, x: xs, y: ys, height: 380, width: 460, describe: `Residual map of ${epoch.name}`,
  });
  const lengths = arrows.map((a) => Math.hypot(a.dx, a.dy)).sort((a, b) => a - b);
  const typical = lengths[Math.floor(lengths.length * 0.8)] || 1;
  const wanted = (many ? 22 : 16) / typical;
  for (const a of arrows) {
    const [x, y] = [f.px(a.x), f.py(a.y)];
    const [ux, uy] = [-a.dx * wanted, -a.dy * wanted];
    const cut = Math.min(1, 60 / Math.hypot(ux, uy));
    f.area.append(svg("g", { class: "arrow" },
      svg("path", { d: `M${x.toFixed(1)} ${y.toFixed(1)}l${(ux * cut).toFixed(1)} ${(uy * cut).toFixed(1)}` }),
      svg("circle", { cx: x, cy: y, r: 1.3 }),
      svg("title", {}, `dx ${fixed(a.dx, 2)}, dy ${fixed(a.dy, 2)} mas` + (a.n > 1 ? `, median of ${a.n}` : ""))));
  }
  const unit = 10 ** Math.floor(Math.log10(typical)) * (typical / 10 ** Math.floor(Math.log10(typical)) >= 5 ? 5 : 1);
  f.root.append(svg("g", { class: "arrow" },
    svg("path", { d: `M${f.box.right - 12} 16h${-unit * wanted}`, "stroke-width": 2 }),
    svg("text", { x: f.box.right - 18 - unit * wanted, y: 20, "text-anchor": "end", stroke: "none" }, `${unit} mas`)));
  return f.root;
}

function cellMedians(arrows, [x0, x1], [y0, y1], n) {
  const side = Math.max(x1 - x0, y1 - y0) / n;
  const cells = new Map();
  for (const a of arrows) {
    const key = Math.floor((a.x - x0) / side) + 1000 * Math.floor((a.y - y0) / side);
    if (!cells.has(key)) cells.set(key, []);
    cells.get(key).push(a);
  }
  return Array.from(cells.values()).filter((c) => c.length > 2).map((c) => ({
    x: median(c.map((a) => a.x)), y: median(c.map((a) => a.y)),
    dx: median(c.map((a) => a.dx)), dy: median(c.map((a) => a.dy)), n: c.length,
  }));
}

function residualHistogram(run, members, axis) {
  const values = members.filter((q) => q.alone).map(({ d, m }) => (axis ? run.dy(m) / run.yErr(d) : run.dx(m) / run.xErr(d)));
  const clipped = values.filter((v) => Number.isFinite(v)).map((v) => Math.max(-8, Math.min(8, v)));
  return histogram({
    title: `Residual in ${axis ? "y" : "x"} over its stated error`, xLabel: "standard deviations (clipped at 8)", yLabel: "stars",
    bins: binned(clipped), height: 190,
  });
}

function zeroPointChart(run, members) {
  const points = members.filter((q) => q.alone && run.mag(q.d) !== null && run.T.mag[run.trackOfMem[q.m]] !== null)
    .map(({ d, m }) => [run.T.mag[run.trackOfMem[m]], run.mag(d) - run.T.mag[run.trackOfMem[m]]]);
  if (!points.length) return null;
  const offsets = points.map((p) => p[1]).sort((a, b) => a - b);
  const reach = Math.max(0.2, 1.3 * Math.abs(offsets[Math.floor(offsets.length * 0.02)]), 1.3 * Math.abs(offsets[Math.floor(offsets.length * 0.98)]));
  const f = frame({
    title: "Magnitude here minus that of the track", xLabel: "magnitude of the track", yLabel: "difference (mag)",
    x: extent(points.map((p) => p[0]), 0.04, 0.5), y: [-reach, reach], height: 190,
  });
  f.area.append(svg("line", { class: "zero", x1: f.box.left, x2: f.box.right, y1: f.py(0), y2: f.py(0) }));
  const d = points.map(([m, v]) => `M${f.px(m).toFixed(1)} ${f.py(v).toFixed(1)}h.01`).join("");
  f.area.append(svg("path", { d, stroke: "var(--calm)", "stroke-width": 3, "stroke-linecap": "round", opacity: 0.7 }));
  return f.root;
}
