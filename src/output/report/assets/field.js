// The first page: the map with its time slider, search results and what is selected.

const FONT = "system-ui, 'DejaVu Sans', sans-serif";

function fieldPage(run, main, open) {
  const slider = h("input", {
    type: "range", min: run.firstYr, max: run.lastYr, step: "any", id: "when", "aria-label": "Time",
  });
  const when = h("output", { for: "when" });
  const side = h("div", { class: "side" });
  const about = h("section", { id: "chosen", "aria-live": "polite" });
  const span = run.lastYr - run.firstYr || 1;
  let playing = null;

  const map = makeMap(run, {
    open: (k) => open(run.T.name[k]),
    selected: describe,
    drawn: (view, epoch) => {
      canvasState(map ? map.canvas : null, view, epoch);
      when.textContent = `${view.t.toFixed(2)}, nearest list ${run.epochs[epoch].name} (${run.times[epoch].toFixed(2)})`;
    },
  });

  function canvasState(canvas, view, epoch) {
    if (!canvas) return;
    Object.assign(canvas.dataset, {
      t: view.t.toFixed(4), epoch, scale: view.scale.toFixed(5), selected: map.selected(),
    });
  }

  function setTime(t) {
    const clamped = Math.min(run.lastYr, Math.max(run.firstYr, t));
    slider.value = clamped;
    map.setTime(clamped);
  }

  function stepEpoch(step) {
    stop();
    const times = run.byTime.map((e) => run.times[e]);
    const at = map.view.t;
    const next = step > 0 ? times.find((t) => t > at + 1e-6) : times.reverse().find((t) => t < at - 1e-6);
    if (next !== undefined) setTime(next);
  }

  // The whole campaign in about twelve seconds.
  function play() {
    if (playing) { stop(); return; }
    let last = null;
    const tick = (clock) => {
      if (!playing || !main.isConnected) return;
      if (last !== null) {
        const t = map.view.t + ((clock - last) / 12000) * span;
        setTime(t > run.lastYr ? run.firstYr : t);
      }
      last = clock;
      playing = requestAnimationFrame(tick);
    };
    playing = requestAnimationFrame(tick);
    button.textContent = "Pause";
  }

  function stop() {
    if (playing) cancelAnimationFrame(playing);
    playing = null;
    button.textContent = "Play";
  }

  const button = h("button", { type: "button", id: "play", onclick: play }, "Play");
  slider.addEventListener("input", () => { stop(); map.setTime(Number(slider.value)); });

  function describe(k) {
    if (k < 0) {
      about.replaceChildren(
        h("h2", {}, "Nothing selected"),
        h("p", { class: "quiet" }, "Click a star, or press n to walk from star to star. Drag to move, scroll to zoom."));
      return;
    }
    const T = run.T;
    about.replaceChildren(
      h("h2", {}, trackLink(run, k)),
      facts([
        ["Detections", T.n_members[k]],
        ["Probability", probabilityText(T.probability[k])],
        ["Magnitude", fixed(T.mag[k], 2)],
        ["Motion", KINDS[T.kind[k]]],
        ["Seen", `${fixed(T.first_yr[k], 1)} to ${fixed(T.last_yr[k], 1)}`],
        T.tangle[k] >= 0 && ["Tangle", h("a", { href: routeOf("tangle", run.header.tangles[T.tangle[k]].number) }, String(run.header.tangles[T.tangle[k]].number))],
      ]),
      h("p", {}, flagChips(run, T.flags[k])),
      h("div", { class: "buttons" },
        h("button", { type: "button", onclick: () => open(T.name[k]) }, "Open its page"),
        h("button", { type: "button", onclick: () => map.goTo(k) }, "Centre here")));
  }

  const layer = (name, text) => {
    const box = h("input", { type: "checkbox", onchange: () => { map.layers[name] = box.checked; map.redraw(); } });
    box.checked = map.layers[name];
    return h("label", {}, box, text);
  };
  const swatch = (kind, text) => [h("dt", {}, swatchOf(kind)), h("dd", {}, text)];

  side.append(about,
    h("h2", {}, "Shown"),
    layer("paths", "Paths over the years seen"),
    layer("detections", "Detections of the nearest list"),
    layer("all", "Detections of every list"),
    layer("groups", "Confused groups, shaded"),
    layer("calm", "Tracks without rivals"),
    layer("names", "Names, when few are in view"),
    h("div", { class: "buttons" },
      h("button", { type: "button", onclick: () => map.zoom(1.5) }, "Closer"),
      h("button", { type: "button", onclick: () => map.zoom(1 / 1.5) }, "Wider"),
      h("button", { type: "button", onclick: map.fit }, "Whole field")),
    h("h2", {}, "Marks"),
    h("dl", { class: "key" },
      swatch("calm", "track without rivals"),
      swatch("doubt", "track in a confused group, or doubtful"),
      swatch("hollow", "predicted outside the years seen"),
      swatch("ring", "detection shared by several tracks"),
      swatch("cross", "detection in no track"),
      run.header.central ? swatch("centre", "central mass") : []));

  const ticks = svg("svg", { class: "ticks", viewBox: "0 0 1000 10", preserveAspectRatio: "none", "aria-hidden": "true" },
    run.times.map((t) => {
      const x = (1000 * (t - run.firstYr)) / span;
      return svg("line", { x1: x, x2: x, y1: 1, y2: 9 });
    }));
  main.classList.add("wide");
  put(main, 
    leftOut(run),
    h("div", { class: "stage" }, map.root, side),
    h("div", { class: "time" },
      h("div", { class: "buttons" },
        h("button", { type: "button", "aria-label": "Earlier list", onclick: () => stepEpoch(-1) }, "‹"),
        button,
        h("button", { type: "button", "aria-label": "Later list", onclick: () => stepEpoch(1) }, "›")),
      h("div", { class: "track-slot" }, slider, ticks),
      when));
  describe(-1);
  setTime(Math.min(run.lastYr, Math.max(run.firstYr, run.header.reference_yr)));
  return {
    map, setTime,
    keys: { " ": play, "[": () => stepEpoch(-1), "]": () => stepEpoch(1) },
    leave: stop,
    show: (k) => { map.goTo(k); map.canvas.focus(); },
  };
}

const KINDS = ["linear", "accelerated", "Keplerian"];

function leftOut(run) {
  const lines = run.header.left_out;
  return lines.length ? h("div", { class: "notice" }, lines.map((line) => h("p", {}, line))) : null;
}

function swatchOf(kind) {
  const shapes = {
    calm: svg("circle", { cx: 10, cy: 9, r: 5, fill: "var(--calm)" }),
    doubt: svg("g", {},
      svg("circle", { cx: 10, cy: 9, r: 9, fill: "var(--doubt)", opacity: 0.22 }),
      svg("circle", { cx: 10, cy: 9, r: 5, fill: "var(--doubt)" })),
    hollow: svg("circle", { cx: 10, cy: 9, r: 5, fill: "none", stroke: "var(--calm)" }),
    ring: svg("g", { fill: "none", stroke: "var(--merged)", "stroke-width": 1.3 },
      svg("circle", { cx: 10, cy: 9, r: 7 }), svg("circle", { cx: 10, cy: 9, r: 4 })),
    cross: svg("path", { d: "M6 5L14 13M6 13L14 5", stroke: "var(--free)", "stroke-width": 1.4 }),
    centre: svg("path", { d: "M10 0V6M10 12V18M1 9H7M13 9H19", stroke: "var(--ink)", "stroke-width": 1.5 }),
  };
  return svg("svg", { viewBox: "0 0 20 18", "aria-hidden": "true" }, shapes[kind]);
}
