// Confused groups: the list, and one group with its explanations side by side.

const CERTIFICATES = {
  all: "every explanation was tried: this is the best",
  priced_out: "no one further track would improve it",
  pool: "the best over the candidate tracks that were formed",
  bounded: "no explanation can be better by more than the gap",
  none: "nothing is proven about it",
};

function tanglesPage(run, main) {
  const list = run.header.tangles;
  put(main, h("h1", {}, "Tangles"), leftOut(run),
    h("p", { class: "lead" }, "Groups of tracks that compete for detections. The certificate says what is known about the chosen explanation."));
  if (!list.length) {
    put(main, h("p", { class: "quiet" }, "No tracks compete for detections."));
    return;
  }
  put(main, sortedTable({
    label: "Tangles",
    rows: list,
    sort: 1,
    down: true,
    columns: [
      { label: "Tangle", value: (t) => t.number, cell: (t) => h("a", { href: routeOf("tangle", t.number) }, String(t.number)) },
      { label: "Tracks", value: (t) => t.n_tracks },
      { label: "Detections", value: (t) => t.n_detections },
      { label: "Epochs", value: (t) => t.n_epochs },
      { label: "Certificate", text: true, value: (t) => t.certificate, cell: (t) => h("span", { title: CERTIFICATES[t.certificate] }, t.certificate) },
      { label: "Gap", unit: "nats", value: (t) => t.gap_nats, cell: (t) => fixed(t.gap_nats, 2) },
      { label: "Rivals", value: (t) => t.rivals.length },
      { label: "Closest rival", unit: "ln odds", value: (t) => closest(t), cell: (t) => fixed(closest(t), 2) },
      { label: "Flags", text: true, value: (t) => run.flagWords(t.flags).join(" "), cell: (t) => flagChips(run, t.flags) },
      { label: "Members", text: true, value: (t) => run.T.name[t.tracks[0]], cell: (t) => trackList(run, t.tracks, 5) },
    ],
  }).element);
}

function closest(tangle) {
  return tangle.rivals.length ? Math.max(...tangle.rivals.map((r) => r.ln_odds)) : null;
}

function trackList(run, tracks, most) {
  return [
    tracks.slice(0, most).map((k, i) => [i ? ", " : "", trackLink(run, k)]),
    tracks.length > most ? ` and ${tracks.length - most} more` : "",
  ];
}

const TAKES = 0;
const SHARES = 1;
const DROPS = 2;
const VANISHES = 3;

function tanglePage(run, main, tangle) {
  const shownRivals = tangle.rivals.slice(0, 11);
  put(main, 
    h("h1", {}, `Tangle ${tangle.number}`),
    h("p", { class: "lead" },
      `${tangle.n_tracks} tracks, ${tangle.n_detections} detections, ${tangle.n_epochs} epochs. Certificate “${tangle.certificate}”: ${CERTIFICATES[tangle.certificate]}`,
      tangle.gap_nats !== null ? ` (${fixed(tangle.gap_nats, 2)} nats).` : ".",
      ` Work done: ${whole(tangle.work)} steps. `, flagChips(run, tangle.flags)),
    h("p", {}, "Tracks: ", trackList(run, tangle.tracks, 60)));
  const base = ownersOf(run, tangle.tracks);
  const panels = [explanationPanel(run, tangle, null, base)];
  for (const rival of shownRivals) panels.push(explanationPanel(run, tangle, rival, base));
  put(main, h("h2", {}, "Explanations side by side"),
    h("p", { class: "quiet" }, "Each panel: the group on the sky, and below it the coordinate that separates the stars best, against time. Lines join a detection to the place its track predicts. Outlined detections change hands; a cross is held by nobody, a square by a star that only the rival has."),
    h("div", { class: "panels", tabindex: "0", role: "region", "aria-label": "Explanations side by side" }, panels));
  if (!tangle.rivals.length) put(main, h("p", { class: "quiet" }, "No rival explanation was kept."));
  else {
    put(main, h("h2", {}, "Rivals in words"), sortedTable({
      label: "Rivals",
      rows: tangle.rivals,
      columns: [
        { label: "Rank", value: (r) => r.rank },
        { label: "ln odds", value: (r) => r.ln_odds, cell: (r) => fixed(r.ln_odds, 2) },
        { label: "Odds", value: (r) => r.ln_odds, cell: (r) => oddsText(r.ln_odds) },
        { label: "What changes", text: true, value: (r) => r.change, cell: (r) => h("span", {}, r.change) },
      ],
    }).element);
  }
}

// detection -> list of tracks of the group that hold it.
function ownersOf(run, tracks) {
  const owners = new Map();
  for (const k of tracks) {
    for (let m = run.trackStart[k]; m < run.trackStart[k + 1]; m++) {
      const d = run.detOfMem[m];
      if (!owners.has(d)) owners.set(d, []);
      owners.get(d).push(k);
    }
  }
  return owners;
}

// The owners after a rival's changes, with the detections that changed and tracks that are gone.
function changedOwners(run, base, rival) {
  const owners = new Map(Array.from(base, ([d, list]) => [d, list.slice()]));
  const changed = new Set();
  const gone = new Set();
  const fresh = new Set();
  for (const [what, track, place, epoch, from] of rival.drawn) {
    if (what === VANISHES) { gone.add(track); continue; }
    const d = run.epochStart[epoch] + place;
    let list = owners.get(d) || [];
    const added = track < 0 ? [] : [track];
    if (track < 0) fresh.add(d);
    if (what === TAKES) list = list.filter((k) => from >= 0 && k !== from).concat(added);
    if (what === SHARES) list = list.concat(added);
    if (what === DROPS) list = list.filter((k) => k !== track);
    owners.set(d, list);
    changed.add(d);
  }
  for (const [d, list] of owners) {
    if (!list.some((k) => gone.has(k))) continue;
    owners.set(d, list.filter((k) => !gone.has(k)));
    changed.add(d);
  }
  return { owners, changed, gone, fresh };
}

function explanationPanel(run, tangle, rival, base) {
  const state = rival ? changedOwners(run, base, rival)
    : { owners: base, changed: changedByAny(run, tangle, base), gone: new Set(), fresh: new Set() };
  const tracks = focusTracks(run, tangle, rival);
  const words = rival && !rival.drawn.length ? h("p", {}, rival.change) : null;
  return h("section", { class: "panel" + (rival ? "" : " best") },
    h("h3", {}, rival ? `Rival ${rival.rank}` : "Chosen"),
    h("p", {}, rival ? `ln odds ${fixed(rival.ln_odds, 2)}, about ${oddsText(rival.ln_odds)}` : "The explanation in the tables"),
    groupChart(run, tracks, state, true),
    groupChart(run, tracks, state, false),
    words, rival && rival.drawn.length ? h("p", {}, rival.change) : null);
}

function changedByAny(run, tangle, base) {
  const all = new Set();
  for (const rival of tangle.rivals.slice(0, 11)) for (const d of changedOwners(run, base, rival).changed) all.add(d);
  return all;
}

// A large group is drawn only around what its rivals touch.
function focusTracks(run, tangle, rival) {
  if (tangle.tracks.length <= 8) return tangle.tracks;
  const touched = new Set();
  for (const r of rival ? [rival] : tangle.rivals.slice(0, 11)) {
    for (const [, track, , , from] of r.drawn) {
      if (track >= 0) touched.add(track);
      if (from >= 0) touched.add(from);
    }
  }
  return touched.size ? Array.from(touched).slice(0, 8) : tangle.tracks.slice(0, 8);
}

function groupChart(run, tracks, { owners, changed, gone, fresh }, onSky) {
  const T = run.T;
  const t0 = Math.min(...tracks.map((k) => T.first_yr[k]));
  const t1 = Math.max(...tracks.map((k) => T.last_yr[k]));
  const [a, b] = extent([t0, t1], 0.04, 0.5);
  const axis = widerAxis(run, tracks, (t0 + t1) / 2);
  const at = (p, t) => (onSky ? p : [t, p[axis]]);
  const lines = tracks.map((k) => run.pathTimes(k, a, b).map((t) => at(run.place(k, t), t)));
  const points = [];
  for (const [d, list] of owners) {
    const mine = list.filter((k) => tracks.includes(k));
    if (mine.length || changed.has(d)) points.push({ d, mine, p: at([run.x(d), run.y(d)], run.times[run.epochOfDet[d]]) });
  }
  const every = lines.flat().concat(points.map((q) => q.p));
  const f = frame({
    xLabel: onSky ? "x, east (mas)" : "time (yr)", yLabel: onSky ? "y, north (mas)" : `${axis ? "y" : "x"} (mas)`,
    flipX: onSky, equal: onSky, width: 320, height: onSky ? 260 : 200,
    x: extent(every.map((p) => p[0]), 0.08, onSky ? 4 : 0.5), y: extent(every.map((p) => p[1]), 0.1, 4),
    describe: onSky ? "The group on the sky" : "The group against time",
  });
  tracks.forEach((k, i) => {
    const g = svg("g", { class: `series s${i % 8}` });
    g.append(polyline(lines[i].map(([x, y]) => [f.px(x), f.py(y)]), { class: "line", "stroke-dasharray": gone.has(k) ? "3 4" : null }));
    const end = lines[i][lines[i].length - 1];
    const text = svg("text", labelPlace(f, end), T.name[k]);
    for (const q of points.filter((p) => p.mine.includes(k))) {
      const t = run.times[run.epochOfDet[q.d]];
      const foot = at(run.place(k, t), t);
      const dot = svg("g", { class: (changed.has(q.d) ? "changed " : "") + (q.mine.length > 1 ? "shared" : "") },
        svg("circle", { cx: f.px(q.p[0]), cy: f.py(q.p[1]), r: changed.has(q.d) ? 4.5 : 2.6 }),
        q.mine.length > 1 ? svg("circle", { class: "ring", cx: f.px(q.p[0]), cy: f.py(q.p[1]), r: 5.5 + 2 * q.mine.indexOf(k) }) : null,
        tipOf(run, q.d));
      g.append(svg("line", { x1: f.px(q.p[0]), y1: f.py(q.p[1]), x2: f.px(foot[0]), y2: f.py(foot[1]) }), dot);
    }
    g.append(text);
    f.area.append(g);
  });
  for (const q of points.filter((p) => !p.mine.length || fresh.has(p.d))) {
    const g = mark(fresh.has(q.d) ? "rival" : "free", f.px(q.p[0]), f.py(q.p[1]));
    g.append(tipOf(run, q.d));
    f.area.append(g);
  }
  return f.root;
}

// Beside the end of a path, kept inside the frame.
function labelPlace(f, [x, y]) {
  const right = f.px(x) < (f.box.left + f.box.right) / 2;
  return { x: f.px(x) + (right ? 6 : -6), y: Math.max(f.box.top + 12, Math.min(f.box.bottom - 5, f.py(y) - 9)), "text-anchor": right ? "start" : "end" };
}

// The axis along which the tracks of a group differ more.
function widerAxis(run, tracks, t) {
  const spread = [0, 1].map((axis) => {
    const [low, high] = extent(tracks.map((k) => run.place(k, t)[axis]), 0);
    return high - low;
  });
  return spread[1] > spread[0] ? 1 : 0;
}
