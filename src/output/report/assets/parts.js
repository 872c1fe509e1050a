// Building blocks of pages: elements, numbers as text, tables that sort and page.

function h(tag, attributes, ...children) {
  return fill(document.createElement(tag), attributes, children);
}

function svg(tag, attributes, ...children) {
  return fill(document.createElementNS("http://www.w3.org/2000/svg", tag), attributes, children);
}

function fill(element, attributes, children) {
  for (const [name, value] of Object.entries(attributes || {})) {
    if (name.startsWith("on")) element.addEventListener(name.slice(2), value);
    else if (value === true) element.setAttribute(name, "");
    else if (value !== false && value !== null && value !== undefined) {
      element.setAttribute(name, value);
    }
  }
  for (const child of children.flat(Infinity)) {
    if (child !== null && child !== undefined && child !== false) element.append(child);
  }
  return element;
}

// Appends what is there; null and false stand for nothing.
function put(element, ...children) {
  return fill(element, {}, children);
}

function fixed(value, decimals) {
  if (value === null || value === undefined || !Number.isFinite(value)) return "";
  const text = value.toFixed(decimals);
  return /^-0\.?0*$/.test(text) ? text.slice(1) : text;
}

// Decimals that show two digits of an error.
function decimalsFor(error) {
  if (!(error > 0)) return 3;
  return Math.min(8, Math.max(0, 1 - Math.floor(Math.log10(error))));
}

function withError(value, error) {
  if (!(error > 0)) return [fixed(value, 3)];
  const decimals = decimalsFor(error);
  return [fixed(value, decimals), h("span", { class: "err" }, " ± " + fixed(error, decimals))];
}

function whole(n) {
  return String(n).replace(/\B(?=(\d{3})+$)/g, "\u202f");
}

function probabilityText(p) {
  return p >= 0.99995 ? "1.0000" : fixed(p, 4);
}

function oddsText(lnOdds) {
  const times = Math.exp(Math.abs(lnOdds));
  const text = times < 10 ? times.toFixed(1) : times < 1e4 ? times.toFixed(0) : times.toExponential(0);
  return lnOdds <= 0 ? `1 : ${text}` : `${text} : 1`;
}

function trackLink(run, k) {
  return h("a", { href: routeOf("track", run.T.name[k]) }, run.T.name[k]);
}

function routeOf(...parts) {
  return "#/" + parts.map((p) => encodeURIComponent(p)).join("/");
}

function flagChips(run, flags) {
  return run.header.flags
    .filter((f) => flags & f.bit)
    .map((f) => h("span", { class: "chip", title: f.meaning }, f.word));
}

// Facts as a two-column list: [label, content, unit].
function facts(rows) {
  return h("dl", { class: "facts" }, rows.filter(Boolean).map(([label, content, unit]) => [
    h("dt", {}, label),
    h("dd", {}, content, unit ? h("span", { class: "unit" }, " " + unit) : null),
  ]));
}

// A table that sorts by any column and shows a page of rows at a time.
// columns: {label, unit, value(row) for sorting, cell(row) for show, text: true for words}
function sortedTable({ columns, rows, pageSize = 100, sort = 0, down = false, rowAttributes, label }) {
  const state = { sort, down, page: 0 };
  const body = h("tbody");
  const heads = columns.map((column, k) =>
    h("th", { scope: "col", class: column.text ? "" : "num" },
      h("button", { type: "button", onclick: () => setSort(k) },
        column.label, column.unit ? h("span", { class: "unit" }, " " + column.unit) : null,
        h("span", { class: "arrow", "aria-hidden": "true" }))));
  const pager = h("div", { class: "pager" });
  const element = h("div", { class: "tablebox" },
    h("div", { class: "scroll", tabindex: "0", role: "region", "aria-label": label || "table" },
      h("table", {}, h("thead", {}, h("tr", {}, heads)), body)), pager);

  function setSort(k) {
    state.down = state.sort === k ? !state.down : false;
    state.sort = k;
    state.page = 0;
    draw();
  }

  function draw() {
    const column = columns[state.sort];
    const keyed = rows.map((row, k) => [column.value(row), k, row]);
    keyed.sort((a, b) => compare(a[0], b[0]) * (state.down ? -1 : 1) || a[1] - b[1]);
    const pages = Math.max(1, Math.ceil(rows.length / pageSize));
    state.page = Math.min(state.page, pages - 1);
    const shown = keyed.slice(state.page * pageSize, (state.page + 1) * pageSize);
    body.replaceChildren(...shown.map(([, , row]) =>
      h("tr", rowAttributes ? rowAttributes(row) : {}, columns.map((col) =>
        h("td", { class: col.text ? "" : "num" }, col.cell ? col.cell(row) : col.value(row))))));
    heads.forEach((head, k) => {
      const on = k === state.sort;
      head.setAttribute("aria-sort", on ? (state.down ? "descending" : "ascending") : "none");
      head.querySelector(".arrow").textContent = on ? (state.down ? " ▾" : " ▴") : "";
    });
    const turn = (step) => () => { state.page += step; draw(); };
    pager.replaceChildren(...(pages === 1 ? [] : [
      h("button", { type: "button", disabled: state.page === 0, onclick: turn(-1) }, "Earlier rows"),
      h("span", {}, `rows ${whole(state.page * pageSize + 1)}–${whole(Math.min(rows.length, (state.page + 1) * pageSize))} of ${whole(rows.length)}`),
      h("button", { type: "button", disabled: state.page >= pages - 1, onclick: turn(1) }, "Later rows"),
    ]));
  }

  draw();
  return { element, setRows: (next) => { rows = next; state.page = 0; draw(); } };
}

function compare(a, b) {
  const [noA, noB] = [a === null || a === undefined || a === "", b === null || b === undefined || b === ""];
  if (noA || noB) return noA - noB;
  if (typeof a === "number" && typeof b === "number") return a - b;
  return String(a).localeCompare(String(b), "en", { numeric: true });
}

// A table of words as it stands in a file; numbers are recognised for sorting.
function plainTable(table, rows = table.rows, cells = {}) {
  const asNumber = (text) => (text !== "" && Number.isFinite(Number(text)) ? Number(text) : text);
  const isText = table.columns.map((_, k) => rows.some((r) => typeof asNumber(r[k]) === "string" && r[k] !== ""));
  return sortedTable({
    label: table.name,
    columns: table.columns.map((name, k) => ({
      label: name.replaceAll("_", " "),
      text: isText[k],
      value: (row) => asNumber(row[k]),
      cell: (row) => (cells[name] ? cells[name](row[k], row) : row[k]),
    })),
    rows,
  }).element;
}
