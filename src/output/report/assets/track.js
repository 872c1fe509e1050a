// The list of tracks, and the page of one track.

function tracksPage(run, main) {
  const T = run.T;
  const all = Array.from({ length: run.nTracks }, (_, k) => k);
  const words = h("input", { type: "search", placeholder: "Name contains", "aria-label": "Name contains" });
  const flag = h("select", { "aria-label": "Flag" },
    h("option", { value: "" }, "Any flag or none"),
    h("option", { value: "0" }, "No flag"),
    run.header.flags.filter((f) => f.tracks).map((f) => h("option", { value: f.bit }, `${f.word} (${f.tracks})`)));
  const count = h("span", { class: "quiet" });
  const table = sortedTable({
    label: "Tracks",
    rows: all,
    columns: [
      { label: "Track", text: true, value: (k) => T.name[k], cell: (k) => trackLink(run, k) },
      { label: "Mag", value: (k) => T.mag[k], cell: (k) => fixed(T.mag[k], 2) },
      { label: "Detections", value: (k) => T.n_members[k] },
      { label: "First", value: (k) => T.first_yr[k], cell: (k) => fixed(T.first_yr[k], 2) },
      { label: "Last", value: (k) => T.last_yr[k], cell: (k) => fixed(T.last_yr[k], 2) },
      { label: "x", unit: "mas", value: (k) => T.sky[k][0], cell: (k) => fixed(T.sky[k][0], 2) },
      { label: "y", unit: "mas", value: (k) => T.sky[k][1], cell: (k) => fixed(T.sky[k][1], 2) },
      { label: "vx", unit: "mas/yr", value: (k) => T.sky[k][2], cell: (k) => fixed(T.sky[k][2], 3) },
      { label: "vy", unit: "mas/yr", value: (k) => T.sky[k][3], cell: (k) => fixed(T.sky[k][3], 3) },
      { label: "Motion", text: true, value: (k) => KINDS[T.kind[k]] },
      { label: "χ²/dof", value: (k) => (T.dof[k] ? T.chi2[k] / T.dof[k] : null), cell: (k) => (T.dof[k] ? fixed(T.chi2[k] / T.dof[k], 2) : "") },
      { label: "Probability", value: (k) => T.probability[k], cell: (k) => probabilityText(T.probability[k]) },
      { label: "Flags", text: true, value: (k) => run.flagWords(T.flags[k]).join(" "), cell: (k) => flagChips(run, T.flags[k]) },
    ],
  });
  const narrow = () => {
    const text = words.value.toLowerCase();
    const rows = all.filter((k) => T.name[k].toLowerCase().includes(text)
      && (flag.value === "" || (flag.value === "0" ? !T.flags[k] : T.flags[k] & Number(flag.value))));
    count.textContent = `${whole(rows.length)} of ${whole(run.nTracks)}`;
    table.setRows(rows);
  };
  words.addEventListener("input", narrow);
  flag.addEventListener("change", narrow);
  put(main, h("h1", {}, "Tracks"), leftOut(run), h("div", { class: "filter" }, words, flag, count),
    h("p", { class: "quiet" }, `Positions and velocities at ${run.header.reference_yr}, x toward east, y toward north.`),
    table.element);
  const wanted = new URLSearchParams(location.hash.split("?")[1] || "").get("flag");
  if (wanted && run.bits[wanted]) flag.value = run.bits[wanted];
  narrow();
}

// What stands at each epoch of a track: its own detection, or rivals, or an empty place.
function historyOf(run, k) {
  const T = run.T;
  const own = [];
  const held = new Set();
  for (let m = run.trackStart[k]; m < run.trackStart[k + 1]; m++) {
    const d = run.detOfMem[m];
    held.add(run.epochOfDet[d]);
    own.push({ m, d, e: run.epochOfDet[d], merged: run.nHolders(d) > 1 });
  }
  const ownDets = new Set(own.map((o) => o.d));
  const rivals = [];
  const missed = [];
  run.epochs.forEach((epoch, e) => {
    const t = epoch.time_yr;
    if (t < T.first_yr[k] - 0.01 || t > T.last_yr[k] + 0.01) return;
    const [x, y] = run.place(k, t);
    for (const d of run.near(e, x, y, epoch.fwhm_mas)) {
      if (!ownDets.has(d)) rivals.push({ d, e, free: run.nHolders(d) === 0 });
    }
    const bright = epoch.limit_mag === null || T.mag[k] === null || T.mag[k] < epoch.limit_mag;
    if (!held.has(e) && bright && insideOutline(epoch.outline_mas, x, y)) missed.push(e);
  });
  return { own, rivals, missed };
}

function kindOf(run, o) {
  if (o.merged) return "merged";
  return run.prob(o.m) < 0.9 ? "doubtful" : "sure";
}

function trackPage(run, main, k) {
  const T = run.T;
  const name = T.name[k];
  const history = historyOf(run, k);
  const step = (to, text) => to >= 0 && to < run.nTracks && h("a", { href: routeOf("track", T.name[to]) }, text);
  put(main, 
    h("div", { class: "titleline" }, h("h1", {}, name), h("span", {}, flagChips(run, T.flags[k])),
      h("span", { class: "steps" }, step(k - 1, "‹ " + (T.name[k - 1] || "")), h("a", { href: routeOf("field") + "?at=" + encodeURIComponent(name) }, "On the map"), step(k + 1, (T.name[k + 1] || "") + " ›"))),
    h("p", { class: "lead" }, trackSentence(run, k, history)));
  if (!T.detailed[k]) {
    put(main, h("div", { class: "notice" }, h("p", {}, "The detections of this track are not on this page, to keep it small. A page with them: "), h("p", {}, h("code", {}, `asterskein report RUN --track ${name}`))));
  } else {
    put(main, trackCharts(run, k, history));
    put(main, h("p", { class: "quiet" }, "Disc: detection. Hollow: membership probability below 0.9. Ringed: shared with another track. Square: another track's detection within one resolution element. Cross: a free detection there. Triangle: nothing listed where the track was expected. Line and shade: model and its one-sigma band."));
  }
  put(main, trackNumbers(run, k));
  if (T.detailed[k]) put(main, h("h2", {}, "Detections"), memberTable(run, history));
  if (history.rivals.length) put(main, h("h2", {}, "Other detections within one resolution element"), rivalTable(run, k, history));
}

function trackSentence(run, k, { own, missed }) {
  const T = run.T;
  const doubtful = own.filter((o) => run.prob(o.m) < 0.9).length;
  const merged = own.filter((o) => o.merged);
  const others = new Set(merged.flatMap((o) => Array.from(run.holders(o.d), (m) => run.trackOfMem[m])));
  others.delete(k);
  const shared = Array.from(others).slice(0, 6);
  return [
    `${T.n_members[k]} detections from ${fixed(T.first_yr[k], 2)} to ${fixed(T.last_yr[k], 2)} follow a motion of kind “${KINDS[T.kind[k]]}”`,
    T.dof[k] ? ` with χ² = ${fixed(T.chi2[k], 1)} for ${T.dof[k]} degrees of freedom. ` : ". ",
    `The probability that this is one real star is put at ${probabilityText(T.probability[k])}. `,
    doubtful ? `${doubtful} of the memberships are doubtful. ` : "",
    merged.length ? [`${merged.length} detections are shared with `, shared.map((o, i) => [i ? ", " : "", trackLink(run, o)]), others.size > shared.length ? " and others. " : ". "] : "",
    missed.length ? `At ${missed.length} epochs it was expected and not listed. ` : "",
    T.tangle[k] >= 0 ? ["It belongs to ", h("a", { href: routeOf("tangle", run.header.tangles[T.tangle[k]].number) }, `tangle ${run.header.tangles[T.tangle[k]].number}`), "."] : "",
  ];
}

function trackCharts(run, k, history) {
  const T = run.T;
  const [t0, t1] = extent([T.first_yr[k], T.last_yr[k]], 0.04, 0.5);
  // A straight line needs two points, its curved band more.
  const times = T.kind[k] === 0
    ? Array.from({ length: 33 }, (_, i) => t0 + ((t1 - t0) * i) / 32)
    : run.pathTimes(k, t0, t1);
  const charts = [skyChart(run, k, history, times)];
  for (const axis of [0, 1]) charts.push(axisChart(run, k, history, times, [t0, t1], axis));
  for (const axis of [0, 1]) charts.push(residualChart(run, k, history, [t0, t1], axis));
  charts.push(magChart(run, k, history, [t0, t1]));
  return h("div", { class: "charts" }, charts.filter(Boolean));
}

const POSITION = [(run, d) => run.x(d), (run, d) => run.y(d)];
const ERROR = [(run, d) => run.xErr(d), (run, d) => run.yErr(d)];

function tipOf(run, d) {
  const names = Array.from(run.holders(d), (m) => run.T.name[run.trackOfMem[m]]).join(", ");
  return svg("title", {}, `${run.epochs[run.epochOfDet[d]].name}:${run.detName(d)}  ${fixed(run.x(d), 2)}, ${fixed(run.y(d), 2)} mas` + (names ? `  ${names}` : "  in no track"));
}

function addMark(run, f, kind, d, x, y) {
  const g = mark(kind, f.px(x), f.py(y), { "data-det": d });
  g.append(tipOf(run, d));
  g.addEventListener("pointerenter", () => lightUp(d, true));
  g.addEventListener("pointerleave", () => lightUp(d, false));
  f.area.append(g);
}

// The same detection in every chart and in the table.
function lightUp(d, on) {
  for (const node of document.querySelectorAll(`[data-det="${d}"]`)) node.classList.toggle("hot", on);
}

function skyChart(run, k, { own, rivals }, times) {
  const line = times.map((t) => run.place(k, t));
  const xs = own.map((o) => run.x(o.d)).concat(line.map((p) => p[0]));
  const ys = own.map((o) => run.y(o.d)).concat(line.map((p) => p[1]));
  const f = frame({
    title: "On the sky", xLabel: "x, east (mas)", yLabel: "y, north (mas)", flipX: true, equal: true,
    x: extent(xs, 0.08, 4), y: extent(ys, 0.08, 4), height: 300,
    describe: `Path of ${run.T.name[k]} on the sky`,
  });
  f.area.append(polyline(line.map(([x, y]) => [f.px(x), f.py(y)]), { class: "model" }));
  for (const r of rivals) addMark(run, f, r.free ? "free" : "rival", r.d, run.x(r.d), run.y(r.d));
  for (const o of own) addMark(run, f, kindOf(run, o), o.d, run.x(o.d), run.y(o.d));
  const c = run.header.central;
  if (c) f.area.append(svg("path", { class: "zero", d: `M${f.px(c.x_mas) - 7} ${f.py(c.y_mas)}h14m-7 -7v14` }));
  return f.root;
}

function bandPath(f, times, middle, half) {
  const up = times.map((t, i) => `${i ? "L" : "M"}${f.px(t).toFixed(1)} ${f.py(middle[i] + half[i]).toFixed(1)}`);
  const down = times.map((t, i) => `L${f.px(t).toFixed(1)} ${f.py(middle[i] - half[i]).toFixed(1)}`).reverse();
  return svg("path", { class: "band", d: up.join("") + down.join("") + "Z" });
}

function axisChart(run, k, { own, rivals, missed }, times, span, axis) {
  const label = axis ? "y" : "x";
  const middle = times.map((t) => run.place(k, t)[axis]);
  const half = times.map((t) => run.placeErr(k, t)[axis]);
  const values = own.map((o) => POSITION[axis](run, o.d));
  const f = frame({
    title: `${label} against time`, xLabel: "time (yr)", yLabel: `${label} (mas)`, x: span,
    y: extent(values.concat(middle), 0.1, 4), describe: `${label} of ${run.T.name[k]} against time`,
  });
  f.area.append(bandPath(f, times, middle, half), polyline(times.map((t, i) => [f.px(t), f.py(middle[i])]), { class: "model" }));
  for (const r of rivals) addMark(run, f, r.free ? "free" : "rival", r.d, run.times[r.e], POSITION[axis](run, r.d));
  for (const o of own) {
    f.area.append(errorBar(f, run.times[o.e], POSITION[axis](run, o.d), ERROR[axis](run, o.d)));
    addMark(run, f, kindOf(run, o), o.d, run.times[o.e], POSITION[axis](run, o.d));
  }
  markMissed(run, f, missed);
  return f.root;
}

function markMissed(run, f, missed) {
  for (const e of missed) {
    const g = mark("missed", f.px(run.times[e]), f.box.bottom - 1);
    g.append(svg("title", {}, `${run.epochs[e].name}: expected, not listed`));
    f.area.append(g);
  }
}

function residualChart(run, k, { own, rivals, missed }, span, axis) {
  if (!own.length) return null;
  const label = axis ? "y" : "x";
  const residual = (o) => (axis ? run.dy(o.m) : run.dx(o.m));
  const reach = own.flatMap((o) => [residual(o) - ERROR[axis](run, o.d), residual(o) + ERROR[axis](run, o.d)]);
  const sorted = own.map(residual).map(Math.abs).sort((a, b) => a - b);
  const limit = Math.max(1, 8 * sorted[Math.floor(sorted.length / 2)], ...reach.map(Math.abs).filter((v) => v < 60));
  const f = frame({
    title: `Residual in ${label}, measured minus predicted`, xLabel: "time (yr)", yLabel: `d${label} (mas)`,
    x: span, y: [-limit * 1.1, limit * 1.1], height: 190, describe: `Residuals of ${run.T.name[k]} in ${label}`,
  });
  const steps = Array.from({ length: 41 }, (_, i) => span[0] + ((span[1] - span[0]) * i) / 40);
  f.area.append(bandPath(f, steps, steps.map(() => 0), steps.map((t) => run.placeErr(k, t)[axis])),
    svg("line", { class: "zero", x1: f.box.left, x2: f.box.right, y1: f.py(0), y2: f.py(0) }));
  for (const r of rivals) {
    const off = POSITION[axis](run, r.d) - run.place(k, run.times[r.e])[axis];
    addMark(run, f, r.free ? "free" : "rival", r.d, run.times[r.e], off);
  }
  for (const o of own) {
    f.area.append(errorBar(f, run.times[o.e], residual(o), ERROR[axis](run, o.d)));
    addMark(run, f, kindOf(run, o), o.d, run.times[o.e], residual(o));
  }
  markMissed(run, f, missed);
  return f.root;
}

function magChart(run, k, { own }, span) {
  const seen = own.filter((o) => run.mag(o.d) !== null);
  if (!seen.length) return null;
  const mags = seen.flatMap((o) => [run.mag(o.d) - (run.magErr(o.d) || 0), run.mag(o.d) + (run.magErr(o.d) || 0)]);
  const f = frame({
    title: "Magnitude against time", xLabel: "time (yr)", yLabel: "magnitude", x: span, flipY: true,
    y: extent(mags, 0.1, 0.4), height: 190, describe: `Magnitude of ${run.T.name[k]} against time`,
  });
  const [m, scatter] = [run.T.mag[k], run.T.mag_scatter[k]];
  if (m !== null) {
    if (scatter) f.area.append(bandPath(f, span, [m, m], [scatter, scatter]));
    f.area.append(svg("line", { class: "model", x1: f.box.left, x2: f.box.right, y1: f.py(m), y2: f.py(m) }));
  }
  for (const o of seen) {
    if (run.magErr(o.d) !== null) f.area.append(errorBar(f, run.times[o.e], run.mag(o.d), run.magErr(o.d)));
    addMark(run, f, kindOf(run, o), o.d, run.times[o.e], run.mag(o.d));
  }
  return f.root;
}

function trackNumbers(run, k) {
  const T = run.T;
  const err = [0, 3, 5].flatMap((i) => [Math.sqrt(T.cov[k][i]), Math.sqrt(T.cov[k][i + 6])]);
  const names = [["x", "mas"], ["y", "mas"], ["vx", "mas/yr"], ["vy", "mas/yr"], ["ax", "mas/yr²"], ["ay", "mas/yr²"]];
  const shown = T.kind[k] === 0 ? 4 : 6;
  const mean = T.mean[k];
  const section = (title, rows) => h("section", {}, h("h2", {}, title), facts(rows));
  const orbits = run.header.orbits[k] || [];
  return h("div", { class: "cards" },
    section(`At ${run.header.reference_yr}`, names.slice(0, shown).map(([label, unit], i) => [label, h("span", { "data-value": label }, withError(T.sky[k][i], err[i])), unit])),
    section(`At its mean epoch, ${fixed(T.mean_epoch_yr[k], 3)}`, names.slice(0, 4).map(([label, unit], i) => {
      const at = [0, 1, 4, 5][i];
      return [label, withError(mean[at], mean[at + 2]), unit];
    })),
    section("Star", [
      ["Magnitude", fixed(T.mag[k], 3)],
      T.mag_scatter[k] !== null && ["Scatter", fixed(T.mag_scatter[k], 3), "mag"],
      ["Detections", h("span", { "data-value": "n_members" }, String(T.n_members[k]))],
      ["Probability", h("span", { "data-value": "probability" }, probabilityText(T.probability[k]))],
      ["χ²", [h("span", { "data-value": "chi2" }, fixed(T.chi2[k], 2)), ` for ${T.dof[k]}`]],
      ["ln evidence", fixed(T.ln_evidence[k], 2)],
    ]),
    orbits.map((o) => h("section", {},
      h("h2", {}, o.rank === 1 ? "Orbit" : `Orbit, minimum ${o.rank}`, o.rank > 1 && o.ln_evidence !== null ? ` (ln evidence ${fixed(o.ln_evidence, 1)})` : ""),
      facts(o.elements.map(([label, unit, value, error]) => [label, withError(value, error), unit])),
      !o.sign_known && h("p", { class: "quiet" }, "No radial velocity: the node may as well lie 180 deg further."))));
}

function memberTable(run, { own }) {
  const T = run.T;
  const others = (o) => Array.from(run.holders(o.d), (m) => run.trackOfMem[m]).filter((t) => t !== run.trackOfMem[o.m]);
  return sortedTable({
    label: "Detections of the track",
    rows: own,
    sort: 2,
    pageSize: 200,
    rowAttributes: (o) => ({
      "data-det": o.d,
      onpointerenter: () => lightUp(o.d, true),
      onpointerleave: () => lightUp(o.d, false),
    }),
    columns: [
      { label: "List", text: true, value: (o) => run.epochs[o.e].name, cell: (o) => h("a", { href: routeOf("epoch", o.e) }, run.epochs[o.e].name) },
      { label: "Id", value: (o) => run.detName(o.d) },
      { label: "Time", unit: "yr", value: (o) => run.times[o.e], cell: (o) => fixed(run.times[o.e], 4) },
      { label: "x", unit: "mas", value: (o) => run.x(o.d), cell: (o) => fixed(run.x(o.d), 3) },
      { label: "y", unit: "mas", value: (o) => run.y(o.d), cell: (o) => fixed(run.y(o.d), 3) },
      { label: "x err", unit: "mas", value: (o) => run.xErr(o.d), cell: (o) => fixed(run.xErr(o.d), 3) },
      { label: "y err", unit: "mas", value: (o) => run.yErr(o.d), cell: (o) => fixed(run.yErr(o.d), 3) },
      { label: "dx", unit: "mas", value: (o) => run.dx(o.m), cell: (o) => fixed(run.dx(o.m), 3) },
      { label: "dy", unit: "mas", value: (o) => run.dy(o.m), cell: (o) => fixed(run.dy(o.m), 3) },
      { label: "Mag", value: (o) => run.mag(o.d), cell: (o) => fixed(run.mag(o.d), 3) },
      { label: "Probability", value: (o) => run.prob(o.m), cell: (o) => probabilityText(run.prob(o.m)) },
      { label: "Share", value: (o) => run.share(o.m), cell: (o) => fixed(run.share(o.m), 3) },
      { label: "Shared with", text: true, value: (o) => others(o).map((t) => T.name[t]).join(" "), cell: (o) => others(o).map((t, i) => [i ? ", " : "", trackLink(run, t)]) },
      { label: "Flags", text: true, value: (o) => run.flagWords(run.memFlags(o.m)).join(" "), cell: (o) => flagChips(run, run.memFlags(o.m)) },
    ],
  }).element;
}

function rivalTable(run, k, { rivals }) {
  const distance = (r) => {
    const [x, y] = run.place(k, run.times[r.e]);
    return Math.hypot(run.x(r.d) - x, run.y(r.d) - y);
  };
  return sortedTable({
    label: "Other detections near the track",
    rows: rivals,
    sort: 2,
    pageSize: 50,
    rowAttributes: (r) => ({ "data-det": r.d }),
    columns: [
      { label: "List", text: true, value: (r) => run.epochs[r.e].name },
      { label: "Id", value: (r) => run.detName(r.d) },
      { label: "Distance", unit: "mas", value: distance, cell: (r) => fixed(distance(r), 2) },
      { label: "Mag", value: (r) => run.mag(r.d), cell: (r) => fixed(run.mag(r.d), 2) },
      { label: "Held by", text: true, value: (r) => Array.from(run.holders(r.d), (m) => run.T.name[run.trackOfMem[m]]).join(" "), cell: (r) => (r.free ? "no track" : Array.from(run.holders(r.d), (m, i) => [i ? ", " : "", trackLink(run, run.trackOfMem[m])])) },
    ],
  }).element;
}
