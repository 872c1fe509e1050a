// Starts the page: unpacks the run, follows the address, serves search, theme and keys.

const page = document.getElementById("page");
const tabs = document.getElementById("tabs");
let here = null;

function tabList(run) {
  return [
    ["field", "Field"],
    ["tracks", "Tracks", run.header.counts.tracks],
    ["tangles", "Tangles", run.header.counts.tangles],
    ["epochs", "Epochs", run.epochs.length],
    ["counts", "Counts and flags"],
    run.extra("verdicts") && ["audit", "Audit", run.extra("verdicts").rows.length],
    (run.extra("completeness") || run.extra("injected")) && ["recovery", "Recovery"],
  ].filter(Boolean);
}

const TAB_OF = { track: "tracks", tangle: "tangles", epoch: "epochs", claim: "audit" };

function show(run) {
  const [path, query] = location.hash.replace(/^#\//, "").split("?");
  const [first, ...rest] = path.split("/").map(decodeURIComponent);
  const kind = first || "field";
  const what = rest.join("/");
  if (here && here.leave) here.leave();
  here = null;
  const main = h("div");
  page.replaceChildren();
  page.className = "";
  const tab = TAB_OF[kind] || kind;
  for (const link of tabs.children) {
    if (link.dataset.tab === tab) link.setAttribute("aria-current", "page");
    else link.removeAttribute("aria-current");
  }
  const missing = (text) => main.append(h("h1", {}, "Not on this page"), h("p", { class: "quiet" }, text));
  const pages = {
    tracks: () => tracksPage(run, main),
    tangles: () => tanglesPage(run, main),
    epochs: () => epochsPage(run, main),
    counts: () => countsPage(run, main),
    audit: () => (run.extra("verdicts") ? auditPage(run, main) : missing("This run has no audit.")),
    recovery: () => recoveryPage(run, main),
    track: () => (run.trackByName.has(what) ? trackPage(run, main, run.trackByName.get(what)) : missing(`No track “${what}” is on this page.`)),
    tangle: () => {
      const tangle = run.header.tangles.find((t) => String(t.number) === what);
      if (tangle) tanglePage(run, main, tangle); else missing(`No tangle ${what} is on this page.`);
    },
    epoch: () => (run.epochs[Number(what)] ? epochPage(run, main, Number(what)) : missing(`No list ${what}.`)),
    claim: () => claimPage(run, main, what),
  };
  if (pages[kind]) {
    pages[kind]();
    page.append(main);
  } else {
    here = fieldPage(run, page, (name) => { location.hash = routeOf("track", name); });
    const at = new URLSearchParams(query || "").get("at");
    if (at && run.trackByName.has(at)) requestAnimationFrame(() => requestAnimationFrame(() => here && here.show(run.trackByName.get(at))));
  }
  page.scrollTop = 0;
  document.title = `${run.header.field}: ${what || kind}`;
  document.documentElement.dataset.shown = path || "field";
}

function setUpSearch(run) {
  const box = document.getElementById("search");
  const hits = document.getElementById("hits");
  const matches = (text) => {
    const low = text.toLowerCase();
    const found = [];
    for (let k = 0; k < run.nTracks && found.length < 20; k++) if (run.T.name[k].toLowerCase().includes(low)) found.push(k);
    return found;
  };
  box.addEventListener("input", () => {
    const found = box.value ? matches(box.value) : [];
    hits.replaceChildren(...found.map((k) => h("option", { value: run.T.name[k] })));
  });
  document.getElementById("find").addEventListener("submit", (event) => {
    event.preventDefault();
    const text = box.value.trim();
    if (!text) return;
    const k = run.trackByName.has(text) ? run.trackByName.get(text) : matches(text)[0];
    box.setCustomValidity(k === undefined ? "No such track on this page" : "");
    if (k === undefined) { box.reportValidity(); return; }
    if (here && here.show) here.show(k);
    else location.hash = routeOf("track", run.T.name[k]);
  });
  box.addEventListener("keydown", () => box.setCustomValidity(""));
}

function isDark() {
  const chosen = document.documentElement.dataset.theme;
  return chosen ? chosen === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
}

function setUpTheme() {
  const apply = () => {
    document.documentElement.toggleAttribute("data-dark", isDark());
    if (here && here.map) here.map.retheme();
  };
  document.getElementById("theme").addEventListener("click", () => {
    document.documentElement.dataset.theme = isDark() ? "light" : "dark";
    apply();
  });
  matchMedia("(prefers-color-scheme: dark)").addEventListener("change", apply);
  apply();
}

function setUpKeys() {
  document.addEventListener("keydown", (event) => {
    const typing = /^(INPUT|SELECT|TEXTAREA|BUTTON)$/.test(event.target.tagName);
    if (event.key === "/" && !typing) {
      event.preventDefault();
      document.getElementById("search").focus();
      return;
    }
    const range = event.target.type === "range";
    if ((typing && !range) || event.ctrlKey || event.metaKey || event.altKey) return;
    const action = here && here.keys && here.keys[event.key];
    if (action) { event.preventDefault(); action(); }
  });
}

async function start() {
  if (typeof DecompressionStream === "undefined") {
    page.append(h("p", { class: "notice" }, "This browser is too old to unpack the page (DecompressionStream is missing). The same numbers stand in the tables."));
    return;
  }
  const store = document.getElementById("run");
  const run = await unpack(store.textContent);
  store.remove();
  tabs.append(...tabList(run).map(([key, label, n]) =>
    h("a", { href: routeOf(key), "data-tab": key }, label, n === undefined ? null : h("span", { class: "n" }, whole(n)))));
  setUpSearch(run);
  setUpTheme();
  setUpKeys();
  window.addEventListener("hashchange", () => show(run));
  show(run);
  document.documentElement.dataset.ready = performance.now().toFixed(0);
}

start().catch((error) => {
  page.replaceChildren(h("h1", {}, "The page could not be drawn"), h("p", {}, String(error)));
  throw error;
});
