"use strict";
// Heat maps and the table of cases, from the numbers in the page; nothing is asked of the outside.
const data = JSON.parse(document.getElementById("data").textContent);
const byId = (name) => document.getElementById(name);
const minus = (text) => String(text).replace("-", "\u2212");
const shown = (v) => v === null ? "" : typeof v === "number" ? minus(Math.abs(v) >= 1e6 ? v.toExponential(3) : v) : v;

function element(kind, attributes, text, svg) {
  const made = svg ? document.createElementNS("http://www.w3.org/2000/svg", kind) : document.createElement(kind);
  for (const [key, value] of Object.entries(attributes || {})) made.setAttribute(key, value);
  if (text !== undefined) made.textContent = text;
  return made;
}

function heatMap() {
  const scalar = data.scalars[byId("pick-scalar").value], xi = +byId("pick-x").value, yi = +byId("pick-y").value;
  const box = byId("heat-map");
  if (xi === yi) { box.replaceChildren(element("p", {}, "Choose two different fields.")); return; }
  const x = data.fields[xi], y = data.fields[yi], turned = xi > yi;
  const nx = x.labels.length || x.edges.length - 1, ny = y.labels.length || y.edges.length - 1;
  const means = data.means[`${Math.min(xi, yi)} ${Math.max(xi, yi)} ${scalar.name}`];
  const at = (i, j) => turned ? means[i * ny + j] : means[j * nx + i];
  const known = means.filter((v) => v !== null);
  if (!known.length) { box.replaceChildren(element("p", {}, "No case has this number.")); return; }
  let low = Math.min(...known), high = Math.max(...known);
  const signed = low < 0 && high > 0;
  if (signed) { high = Math.max(-low, high); low = -high; }
  const colours = signed ? data.colours.vik : data.colours.batlow;
  const place = (v) => high > low ? (v - low) / (high - low) : 0.5;
  const colour = (v) => colours[Math.min(colours.length - 1, Math.floor(place(v) * colours.length))];
  const W = 800, H = 470, left = 110, top = 34, right = 110, bottom = 64;
  const w = (W - left - right) / nx, h = (H - top - bottom) / ny;
  const svg = element("svg", { viewBox: `0 0 ${W} ${H}`, role: "img", "aria-label": `${scalar.words} over ${x.name} and ${y.name}` }, undefined, true);
  const put = (kind, attributes, text) => svg.appendChild(element(kind, attributes, text, true));
  const write = (text, px, py, anchor, more) => put("text", Object.assign({ x: px, y: py, "text-anchor": anchor, "font-size": 13, fill: "#1a1a1a" }, more), text);
  for (let j = 0; j < ny; j++) for (let i = 0; i < nx; i++) {
    const v = at(i, j);
    if (v === null) continue;
    const px = left + i * w, py = H - bottom - (j + 1) * h;
    const cell = put("rect", { x: px, y: py, width: w + 0.5, height: h + 0.5, fill: colour(v) });
    cell.appendChild(element("title", {}, shown(v), true));
    const dark = signed ? Math.abs(place(v) - 0.5) > 0.3 : place(v) < 0.55;
    if (nx * ny <= 150) write(minus(+v.toPrecision(2)), px + w / 2, py + h / 2 + 4, "middle", { "font-size": 11, fill: dark ? "#fff" : "#1a1a1a" });
  }
  const ticks = (field, n) => field.labels.length
    ? field.labels.map((text, i) => [i + 0.5, text]).filter((_, i) => i % Math.max(1, Math.floor(n / 12)) === 0)
    : field.edges.map((e, i) => [i, +e.toPrecision(3)]).filter((_, i) => i % Math.max(1, Math.floor(n / 6)) === 0);
  for (const [i, text] of ticks(x, nx)) write(minus(text), left + i * w, H - bottom + 18, "middle");
  for (const [j, text] of ticks(y, ny)) write(minus(text), left - 8, H - bottom - j * h + 4, "end");
  write(x.words, (left + W - right) / 2, H - 14, "middle");
  write(y.words, 16, (top + H - bottom) / 2, "middle", { transform: `rotate(-90 16 ${(top + H - bottom) / 2})` });
  write(scalar.words, left, 20, "start", { "font-weight": "bold" });
  const step = (H - top - bottom) / colours.length;
  colours.forEach((c, i) => put("rect", { x: W - 92, y: H - bottom - (i + 1) * step, width: 16, height: step + 0.5, fill: c }));
  for (const v of [low, (low + high) / 2, high]) write(minus(+v.toPrecision(3)), W - 70, H - bottom - place(v) * (H - top - bottom) + 4, "start");
  box.replaceChildren(svg);
}

if (data.first && byId("choose")) {
  data.scalars.forEach((s, i) => byId("pick-scalar").append(new Option(s.name, i)));
  for (const id of ["pick-x", "pick-y"]) data.fields.forEach((f, i) => byId(id).append(new Option(f.name, i)));
  byId("pick-scalar").value = Math.max(0, data.scalars.findIndex((s) => s.name === "signal_to_noise"));
  [byId("pick-x").value, byId("pick-y").value] = data.first;
  for (const id of ["pick-scalar", "pick-x", "pick-y"]) byId(id).addEventListener("change", heatMap);
  byId("choose").hidden = false;
  heatMap();
}

const PAGE = 50;
let rows = data.rows, sorted = -1, upward = true, page = 0;

const tests = {
  "<=": (a, b) => a <= b, ">=": (a, b) => a >= b, "!=": (a, b) => a !== b,
  "<": (a, b) => a < b, ">": (a, b) => a > b, "=": (a, b) => a === b,
};

function filtered() {
  const conditions = byId("filter").value.split(",").map((t) => t.trim()).filter(Boolean);
  let kept = data.rows;
  for (const text of conditions) {
    const parts = text.match(/^([\w.]+)\s*(<=|>=|!=|<|>|=)\s*(.*)$/);
    const column = parts ? data.columns.indexOf(parts[1]) : -1;
    if (column < 0) throw new Error(`"${text}" is not a condition on a column`);
    const wanted = parts[3] !== "" && isFinite(parts[3]) ? +parts[3] : parts[3].trim();
    kept = kept.filter((row) => row[column] !== null && tests[parts[2]](row[column], wanted));
  }
  return kept;
}

function refresh() {
  byId("fault").textContent = "";
  try { rows = filtered().slice(); } catch (error) { byId("fault").textContent = error.message; return; }
  if (sorted >= 0) rows.sort((a, b) => {
    const [p, q] = [a[sorted], b[sorted]];
    if (p === null || q === null) return (p === null) - (q === null);
    return (p < q ? -1 : p > q ? 1 : 0) * (upward ? 1 : -1);
  });
  page = 0;
  draw();
}

function draw() {
  const body = byId("cases").tBodies[0], start = page * PAGE;
  body.replaceChildren(...rows.slice(start, start + PAGE).map((row) => {
    const line = element("tr");
    row.forEach((v, i) => line.append(element("td", { class: i === row.length - 1 ? "reason" : typeof v === "number" ? "number" : "" }, shown(v))));
    return line;
  }));
  byId("where").textContent = rows.length ? `${start + 1} to ${Math.min(start + PAGE, rows.length)} of ${rows.length}` : "no case";
  byId("back").disabled = page === 0;
  byId("next").disabled = start + PAGE >= rows.length;
}

const head = element("tr");
data.columns.forEach((name, i) => {
  const cell = element("th", { scope: "col", "aria-sort": "none" }), button = element("button", { type: "button" }, name);
  button.addEventListener("click", () => {
    upward = sorted === i ? !upward : true;
    sorted = i;
    for (const other of head.children) other.setAttribute("aria-sort", "none");
    cell.setAttribute("aria-sort", upward ? "ascending" : "descending");
    refresh();
  });
  cell.append(button);
  head.append(cell);
});
byId("cases").tHead.append(head);
byId("filter").addEventListener("input", refresh);
byId("back").addEventListener("click", () => { page--; draw(); });
byId("next").addEventListener("click", () => { page++; draw(); });
byId("filter-box").hidden = false;
byId("pager").hidden = false;
draw();
