// Counts and flags of the whole run, and the tables of an audit or a recovery beside it.

function countsPage(run, main) {
  const c = run.header.counts;
  const probabilities = run.T.probability;
  put(main, h("h1", {}, "Counts and flags"), leftOut(run),
    h("div", { class: "cards" },
      h("section", {}, h("h2", {}, "Run"), facts([
        ["Lists", whole(c.epochs)], ["Detections", whole(c.detections)], ["Tracks", whole(c.tracks)],
        ["Memberships", whole(c.memberships)], ["Merged detections", whole(c.merged_detections)],
        ["Detections in no track", whole(c.leftovers)], ["Tangles", whole(c.tangles)],
        ["Memberships expected to be wrong", `${c.expected_wrong} (sum of 1 minus probability)`],
      ])),
      h("section", {}, h("h2", {}, "Field"), facts([
        ["Reference epoch", String(run.header.reference_yr)],
        run.header.origin && ["Origin (ICRS)", `${run.header.origin[0]}, ${run.header.origin[1]}`, "deg"],
        run.header.central && run.header.central.mass_msun && ["Central mass", run.header.central.mass_msun.toExponential(3), "solar masses"],
        run.header.central && run.header.central.distance_pc && ["Distance", whole(Math.round(run.header.central.distance_pc)), "pc"],
        ["Made by", run.header.program],
      ]))),
    h("h2", {}, "Flags"),
    sortedTable({
      label: "Flags",
      rows: run.header.flags,
      sort: 1,
      down: true,
      columns: [
        { label: "Flag", text: true, value: (f) => f.word, cell: (f) => (f.tracks ? h("a", { href: routeOf("tracks") + "?flag=" + f.word }, f.word) : f.word) },
        { label: "Tracks", value: (f) => f.tracks },
        { label: "Memberships", value: (f) => f.members },
        { label: "Meaning", text: true, value: (f) => f.meaning },
      ],
    }).element,
    h("div", { class: "charts" },
      histogram({ title: "Tracks by magnitude", xLabel: "magnitude", yLabel: "tracks", bins: binned(run.T.mag.filter((m) => m !== null)), height: 210 }),
      histogram({ title: "Tracks by number of detections", xLabel: "detections", yLabel: "tracks", bins: binned(run.T.n_members), height: 210 }),
      histogram({ title: "Probability of being one real star", xLabel: "probability", yLabel: "tracks", bins: binned(probabilities), height: 210 })));
  if (run.header.notes.length) {
    put(main, h("h2", {}, "Notes"), sortedTable({
      label: "Notes",
      rows: run.header.notes,
      columns: ["What", "Where", "Finding"].map((label, k) => ({ label, text: true, value: (n) => n[k] })),
    }).element);
  }
}

function valuesOf(table, name) {
  const k = table.columns.indexOf(name);
  return k < 0 ? null : table.rows.map((r) => r[k]);
}

function auditPage(run, main) {
  const verdicts = run.extra("verdicts");
  put(main, h("h1", {}, "Audit"),
    h("p", { class: "lead" }, "Claimed objects, and what the lists say for and against each being a star of its own. A verdict is a weighing of evidence, not a proof."),
    plainTable(verdicts, verdicts.rows, {
      claim: (name) => h("a", { href: routeOf("claim", name) }, name),
      verdict: (word) => h("strong", {}, word.replaceAll("_", " ")),
      best_rival: (names) => rivalNames(run, names),
    }));
}

function rivalNames(run, text) {
  return text.split(/([;,\s]+)/).map((word) => (run.trackByName.has(word) ? trackLink(run, run.trackByName.get(word)) : word));
}

function claimPage(run, main, name) {
  const verdicts = run.extra("verdicts");
  const row = verdicts.rows[valuesOf(verdicts, "claim").indexOf(name)];
  const evidence = run.extra("evidence");
  put(main, h("h1", {}, name), facts(verdicts.columns.map((column, k) => [
    column.replaceAll("_", " "), column === "best_rival" ? rivalNames(run, row[k]) : row[k],
  ])));
  if (!evidence) return;
  const own = evidence.columns.indexOf("claim");
  const rows = evidence.rows.filter((r) => r[own] === name);
  put(main, h("h2", {}, "Epoch by epoch"), evidenceChart(evidence, rows), plainTable(evidence, rows));
}

// Every numeric column of evidence in nats becomes a set of steps over the epochs.
function evidenceChart(table, rows) {
  const nats = table.columns.map((name, k) => [name, k]).filter(([name]) => /nats|ln_/.test(name)).slice(0, 6);
  if (!nats.length || !rows.length) return null;
  const points = nats.map(([, k]) => rows.map((r, i) => [i + 1, r[k] === "" ? NaN : Number(r[k])]));
  const f = frame({
    title: "Contribution of each epoch", xLabel: "epoch in order", yLabel: "nats", width: 700, height: 240,
    x: [0, rows.length + 1], y: extent(points.flat().map((p) => p[1]), 0.1, 1),
  });
  f.area.append(svg("line", { class: "zero", x1: f.box.left, x2: f.box.right, y1: f.py(0), y2: f.py(0) }));
  points.forEach((list, i) => {
    const g = svg("g", { class: `series s${i % 8}` });
    const clean = list.filter((p) => Number.isFinite(p[1]));
    g.append(polyline(clean.map(([x, y]) => [f.px(x), f.py(y)]), {}));
    for (const [x, y] of clean) g.append(svg("circle", { cx: f.px(x), cy: f.py(y), r: 2.5 }));
    g.append(svg("text", { x: f.box.right - 8, y: f.box.top + 14 + 13 * i, "text-anchor": "end" }, nats[i][0].replaceAll("_", " ")));
    f.area.append(g);
  });
  return h("div", { class: "charts" }, f.root);
}

function recoveryPage(run, main) {
  put(main, h("h1", {}, "Recovery"),
    h("p", { class: "lead" }, "What became of made-up stars that were put into the real lists."));
  for (const [name, title] of [["completeness", "Completeness"], ["injected", "Made-up stars one by one"]]) {
    const table = run.extra(name);
    if (table) put(main, h("h2", {}, title), name === "completeness" ? completenessCharts(table) : null, plainTable(table));
  }
}

// One chart per kind of bin, where the table has bins with limits and a fraction.
function completenessCharts(table) {
  const find = (...names) => names.map((n) => table.columns.indexOf(n)).find((k) => k >= 0) ?? -1;
  const by = find("by", "kind", "what", "quantity");
  const [low, high] = [find("low", "bin_low", "from"), find("high", "bin_high", "to")];
  const value = find("completeness", "fraction");
  const error = find("completeness_err", "fraction_err", "err");
  if (low < 0 || high < 0 || value < 0) return null;
  const groups = new Map();
  for (const r of table.rows) {
    const key = by < 0 ? "" : r[by];
    if (!groups.has(key)) groups.set(key, []);
    groups.get(key).push(r);
  }
  return h("div", { class: "charts" }, Array.from(groups, ([key, rows]) => {
    const f = frame({
      title: key ? `Completeness by ${key.replaceAll("_", " ")}` : "Completeness", xLabel: key.replaceAll("_", " "), yLabel: "fraction",
      x: extent(rows.flatMap((r) => [Number(r[low]), Number(r[high])]), 0.02, 1e-6), y: [0, 1.05], height: 210,
    });
    for (const r of rows) {
      if (r[value] === "") continue;
      const [a, b, v] = [Number(r[low]), Number(r[high]), Number(r[value])];
      f.area.append(svg("line", { class: "model", x1: f.px(a), x2: f.px(b), y1: f.py(v), y2: f.py(v) }));
      if (error >= 0 && r[error] !== "") f.area.append(errorBar(f, (a + b) / 2, v, Number(r[error])));
    }
    return f.root;
  }));
}
