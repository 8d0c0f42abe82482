"use strict";
(() => {
const read = (id) => JSON.parse(document.getElementById(id).textContent);
const facts = read("facts"), packed = read("arrays");
const bytes = (text) => Uint8Array.from(atob(text), (letter) => letter.charCodeAt(0));
const floats = (name) => new Float32Array(bytes(packed[name]).buffer);
const [nz, ny, nx] = facts.shape, plane = ny * nx, volume = nz * plane, count = facts.ppm.length;
const values = floats("values"), errors = floats("errors"), spectrum = floats("spectrum");
const spread = floats("spread"), shapes = floats("shapes"), labels = bytes(packed.labels);
const truth = facts.truth ? floats("truth") : null;
const by = (id) => document.getElementById(id);
const views = [["amount", "amount"], ["error", "standard error"]]
  .concat(truth ? [["truth", "truth"], ["off", "amount − truth"]] : []);
const state = { species: 0, view: "amount", z: 0, y: ny >> 1, x: nx >> 1 };
const SVG = "http://www.w3.org/2000/svg";

const spaced = (text) => text.replace(/\B(?=(\d{3})+(?!\d))/g, "\u202f");
const digits = (value) => {
  if (value === 0) return "0";
  const size = Math.abs(value);
  if (size < 1e-2) return value.toExponential(1);
  const step = 10 ** Math.max(0, Math.floor(Math.log10(size)) - 2);
  if (size >= 100) return spaced(String(Math.round(value / step) * step));
  return value.toFixed(size >= 10 ? 1 : 2);
};
const length = (um) => String(+um.toPrecision(4));
const pair = (value, error) => {
  if (!(error > 0)) return `${digits(value)} ± 0`;
  const power = Math.floor(Math.log10(error)) - 1;
  const round = (v) => power > 0 ? spaced(String(Math.round(v / 10 ** power) * 10 ** power))
    : v.toFixed(Math.min(4, -power));
  return `${round(value)} ± ${round(error)}`;
};
const at = (species, z, y, x) => ((species * nz + z) * ny + y) * nx + x;
const element = (name, attributes, parent, text) => {
  const node = document.createElementNS(SVG, name);
  for (const key in attributes) node.setAttribute(key, attributes[key]);
  if (text !== undefined) node.textContent = text;
  parent.appendChild(node);
  return node;
};

const sorted = (array, from, to) => Float32Array.from(array.subarray(from, to)).sort();
const range = (array, species) => {
  const all = sorted(array, species * volume, (species + 1) * volume);
  const top = all[Math.floor(0.998 * (all.length - 1))] || all[all.length - 1] || 1;
  const step = 10 ** Math.floor(Math.log10(top));
  return Math.ceil(top / step * 2) / 2 * step;
};
const limits = facts.names.map((_, s) => {
  const top = range(truth || values, s), wrong = range(errors, s);
  return { amount: [0, top], truth: [0, top], error: [0, wrong], off: [-top / 2, top / 2] };
});
const value = (view, index) => view === "amount" ? values[index] : view === "error" ? errors[index]
  : view === "truth" ? truth[index] : values[index] - truth[index];

function drawPlane() {
  const canvas = by("plane"), zoom = Math.max(1, Math.ceil(512 / nx));
  canvas.width = nx * zoom; canvas.height = ny * zoom;
  canvas.style.aspectRatio = `${nx * facts.voxel_um[2]} / ${ny * facts.voxel_um[1]}`;
  const context = canvas.getContext("2d"), image = context.createImageData(nx, ny);
  const [low, high] = limits[state.species][state.view];
  const colours = state.view === "off" ? facts.error_colours : facts.amount_colours;
  for (let y = 0; y < ny; y++) for (let x = 0; x < nx; x++) {
    const share = (value(state.view, at(state.species, state.z, y, x)) - low) / (high - low);
    const colour = colours[Math.min(255, Math.max(0, Math.round(255 * share)))];
    const place = 4 * ((ny - 1 - y) * nx + x);
    image.data.set(colour, place); image.data[place + 3] = 255;
  }
  const small = document.createElement("canvas");
  small.width = nx; small.height = ny;
  small.getContext("2d").putImageData(image, 0, 0);
  context.imageSmoothingEnabled = false;
  context.drawImage(small, 0, 0, nx * zoom, ny * zoom);
  drawMarks(context, zoom);
  const name = facts.names[state.species], title = views.find((one) => one[0] === state.view)[1];
  by("plane-title").textContent =
    `${name}, ${title}, ${length(facts.heights_um[state.z])} µm above the diamond`;
  canvas.setAttribute("aria-label", by("plane-title").textContent);
  drawBar(colours, low, high);
}

function drawMarks(context, zoom) {
  const x = (state.x + 0.5) * zoom, y = (ny - 0.5 - state.y) * zoom, reach = 1.6 * zoom;
  for (const [style, width] of [["#000", 5], ["#fff", 2]]) {
    context.strokeStyle = style; context.lineWidth = width;
    context.strokeRect(x - reach / 2 - 1, y - reach / 2 - 1, reach + 2, reach + 2);
  }
  const wide = nx * facts.voxel_um[2], step = 10 ** Math.floor(Math.log10(wide / 4));
  const long = [5, 2, 1].map((n) => n * step).find((n) => n <= wide / 4) || step;
  const pixels = long / facts.voxel_um[2] * zoom, top = ny * zoom - 14;
  context.fillStyle = "#000"; context.fillRect(12, top - 2, pixels + 4, 9);
  context.fillStyle = "#fff"; context.fillRect(14, top, pixels, 5);
  context.font = `600 ${Math.round(nx * zoom / 26)}px sans-serif`;
  context.lineWidth = 4; context.strokeStyle = "#000";
  context.strokeText(`${long} µm`, 14, top - 8); context.fillText(`${long} µm`, 14, top - 8);
}

function drawBar(colours, low, high) {
  const context = by("bar").getContext("2d");
  colours.forEach((colour, i) => { context.fillStyle = `rgb(${colour})`; context.fillRect(i, 0, 1, 12); });
  by("low").textContent = digits(low); by("high").textContent = digits(high);
  by("unit").textContent = "mM";
}

function drawStack() {
  const svg = by("stack"), width = 190, height = 400;
  svg.replaceChildren();
  svg.setAttribute("viewBox", `0 0 ${width} ${height}`);
  svg.setAttribute("preserveAspectRatio", "xMidYMin meet");
  const believe = facts.believe[state.species], worst = Math.max(...believe.error_mM);
  const base = height - 66, room = base - 20, dz = facts.voxel_um[0];
  const top = facts.heights_um[nz - 1] + dz / 2;
  const level = (um) => base - room * um / top;
  element("text", { x: 4, y: 12, class: "axis" }, svg, "z (µm)");
  element("text", { x: 186, y: 12, "text-anchor": "end" }, svg, "± mM, bar");
  for (let z = 0; z < nz; z++) {
    const upper = level(facts.heights_um[z] + dz / 2), lower = level(facts.heights_um[z] - dz / 2);
    const group = element("g", { role: "option", id: `plane-${z}`, "data-z": z,
      "aria-selected": z === state.z }, svg);
    element("rect", { x: 34, y: upper + 1, width: 90, height: Math.max(2, lower - upper - 2),
      fill: z === state.z ? "#0072b2" : "#e6eaee", stroke: "#9aa5b1" }, group);
    element("rect", { x: 130, y: upper + 1, width: 56 * believe.error_mM[z] / worst,
      height: Math.max(2, lower - upper - 2), fill: "#d55e00", opacity: 0.75 }, group);
    const middle = (upper + lower) / 2 + 4;
    element("text", { x: 28, y: middle, "text-anchor": "end" }, group, length(facts.heights_um[z]));
    element("text", { x: 79, y: middle, "text-anchor": "middle",
      fill: z === state.z ? "#fff" : "#1d232b" }, group, `± ${digits(believe.error_mM[z])}`);
    element("title", {}, group, `${length(facts.heights_um[z])} µm above the diamond: r.m.s. standard `
      + `error ${digits(believe.error_mM[z])} mM, ${Math.round(100 * believe.readable[z])} % of voxels readable`);
  }
  element("rect", { x: 34, y: base, width: 90, height: 8, fill: "#b9c4d0" }, svg);
  element("rect", { x: 34, y: base + 8, width: 90, height: 14, fill: "#c8577e" }, svg);
  element("rect", { x: 34, y: base + 22, width: 90, height: 22, fill: "#dfe5ec" }, svg);
  element("text", { x: 4, y: base + 58 }, svg, `diamond; layer ${length(facts.layer_um[1])} µm thick`);
  svg.querySelectorAll("text").forEach((text) => text.setAttribute("font-size", "12"));
}

function drawSpectrum() {
  const svg = by("spectrum"), width = 560, height = 270, edge = { l: 58, r: 12, t: 26, b: 40 };
  svg.replaceChildren();
  svg.setAttribute("viewBox", `0 0 ${width} ${height}`);
  const voxel = (state.z * ny + state.y) * nx + state.x, curves = { seen: [], model: [], truth: [] };
  for (let f = 0; f < count; f++) {
    curves.seen.push(spectrum[f * volume + voxel]);
    let model = 0, real = 0;
    for (let s = 0; s < facts.names.length; s++) {
      model += values[s * volume + voxel] * shapes[s * count + f];
      if (truth) real += truth[s * volume + voxel] * shapes[s * count + f];
    }
    curves.model.push(model); curves.truth.push(real);
  }
  const band = spread[voxel], all = curves.seen.concat(curves.model, truth ? curves.truth : []);
  const high = Math.max(...all, 1e-12) + band, low = Math.min(...all, 0) - band;
  const power = 3 * Math.floor(Math.log10(high) / 3), unit = 10 ** power;
  const first = facts.ppm[0], last = facts.ppm[count - 1];
  const X = (ppm) => edge.l + (last - ppm) / (last - first) * (width - edge.l - edge.r);
  const Y = (v) => edge.t + (high - v) / (high - low) * (height - edge.t - edge.b);
  const points = (list) => list.map((v, f) => `${X(facts.ppm[f]).toFixed(1)},${Y(v).toFixed(1)}`);
  const upper = points(curves.seen.map((v) => v + band)), lower = points(curves.seen.map((v) => v - band));
  element("polygon", { points: upper.concat(lower.reverse()).join(" "), fill: "#0072b2", opacity: 0.22 }, svg);
  element("line", { x1: edge.l, x2: width - edge.r, y1: Y(0), y2: Y(0), stroke: "#9aa5b1" }, svg);
  if (truth) element("polyline", { points: points(curves.truth).join(" "), fill: "none", stroke: "#1d232b", "stroke-width": 1.2 }, svg);
  element("polyline", { points: points(curves.model).join(" "), fill: "none", stroke: "#d55e00", "stroke-width": 1.6, "stroke-dasharray": "6 3" }, svg);
  element("polyline", { points: points(curves.seen).join(" "), fill: "none", stroke: "#0072b2", "stroke-width": 2 }, svg);
  const step = last - first > 6 ? 2 : last - first > 3 ? 1 : 0.5;
  for (let ppm = Math.ceil(first / step) * step; ppm <= last; ppm += step) {
    element("line", { x1: X(ppm), x2: X(ppm), y1: height - edge.b, y2: height - edge.b + 5, stroke: "#66707c" }, svg);
    element("text", { x: X(ppm), y: height - edge.b + 19, "text-anchor": "middle" }, svg, String(Math.round(ppm * 10) / 10));
  }
  element("text", { x: width / 2, y: height - 5, "text-anchor": "middle" }, svg, "chemical shift (ppm)");
  element("text", { x: 4, y: 14 }, svg, `10${superscript(power)} A/m s`);
  for (const part of [0, 0.5, 1]) {
    const v = part * high;
    element("text", { x: edge.l - 6, y: Y(v) + 4, "text-anchor": "end" }, svg, digits(v / unit));
  }
  let before = -99;
  facts.names.map((name, s) => [X(facts.lines_ppm[s]), name]).sort((a, b) => a[0] - b[0]).forEach(([x, name]) => {
    const raised = x - before < 52 ? 12 : 0;
    before = raised ? -99 : x;
    element("line", { x1: x, x2: x, y1: edge.t, y2: height - edge.b, stroke: "#9aa5b1", "stroke-dasharray": "2 3" }, svg);
    element("text", { x, y: edge.t - 2 - raised, "text-anchor": "middle", fill: "#66707c" }, svg, name);
  });
  svg.querySelectorAll("text").forEach((text) => text.setAttribute("font-size", "12"));
  svg.dataset.peak = Math.max(...curves.seen);
  by("legend").textContent = "blue: cube ± 1 standard error; orange, dashed: amounts times known lines"
    + (truth ? "; black: truth" : "");
}
const superscript = (power) => String(power).replace(/./g, (c) => c === "-" ? "⁻" : "⁰¹²³⁴⁵⁶⁷⁸⁹"[+c]);

function drawTable() {
  const [dz, dy, dx] = facts.voxel_um;
  by("place").textContent = `voxel x ${length(state.x * dx)} µm, y ${length(state.y * dy)} µm, `
    + `z ${length(facts.heights_um[state.z])} µm`;
  const head = ["", "amount (mM)", "readable?"].concat(truth ? ["truth (mM)"] : []);
  by("amounts").tHead.innerHTML = `<tr>${head.map((h) => `<th>${h}</th>`).join("")}</tr>`;
  const body = by("amounts").tBodies[0];
  body.replaceChildren();
  facts.names.forEach((name, s) => {
    const index = at(s, state.z, state.y, state.x), row = body.insertRow(), label = labels[index];
    if (s === state.species) row.className = "chosen";
    row.insertCell().textContent = name;
    const amount = row.insertCell();
    amount.textContent = pair(values[index], errors[index]);
    amount.id = `amount-${s}`;
    amount.dataset.value = values[index]; amount.dataset.error = errors[index];
    const verdict = row.insertCell();
    verdict.textContent = ["no error", "yes", "with care", "no", "no value"][label];
    verdict.title = facts.label_meaning[label];
    if (label !== 1) verdict.className = "poor";
    if (truth) row.insertCell().textContent = digits(truth[index]);
  });
  const chosen = at(state.species, state.z, state.y, state.x);
  by("spoken").textContent = `${by("place").textContent}: ${facts.names[state.species]} `
    + `${pair(values[chosen], errors[chosen])} millimolar`;
}

function draw() { drawStack(); drawPlane(); drawTable(); drawSpectrum(); choose(); }
function choose() {
  document.querySelectorAll("input[name=species]").forEach((box, s) => { box.checked = s === state.species; });
  document.querySelectorAll("input[name=view]").forEach((box) => { box.checked = box.value === state.view; });
}
function set(change) {
  Object.assign(state, change);
  state.z = Math.min(nz - 1, Math.max(0, state.z));
  state.y = Math.min(ny - 1, Math.max(0, state.y));
  state.x = Math.min(nx - 1, Math.max(0, state.x));
  draw();
}

function radios(id, name, options) {
  options.forEach(([key, text]) => {
    const label = document.createElement("label"), box = document.createElement("input");
    box.type = "radio"; box.name = name; box.value = key; box.id = `${name}-${key}`;
    label.append(box, ` ${text}`);
    by(id).append(label);
  });
}
function list(id, rows) {
  rows.forEach(([name, text]) => {
    const term = document.createElement("dt"), detail = document.createElement("dd");
    term.textContent = name; detail.textContent = text;
    by(id).append(term, detail);
  });
}
function believe() {
  const table = document.createElement("table"), head = table.createTHead().insertRow();
  const cell = (row, text, kind) => { const c = document.createElement(kind || "td"); c.textContent = text; row.append(c); };
  ["", ...facts.heights_um.map((z) => `${length(z)} µm`)].forEach((text) => cell(head, text, "th"));
  facts.believe.forEach((one) => {
    const add = (text, list) => { const row = table.insertRow(); cell(row, text); list.forEach((t) => cell(row, t)); };
    add(`${one.name}: standard error, mM (r.m.s.)`, one.error_mM.map(digits));
    if (one.true_error_mM) add(`${one.name}: true error, mM (r.m.s.)`, one.true_error_mM.map(digits));
    add(`${one.name}: voxels above 3.3 standard errors`, one.readable.map((r) => `${Math.round(100 * r)} %`));
  });
  by("believe").append(table);
  facts.remarks.forEach((text) => { const item = document.createElement("li"); item.textContent = text; by("remarks").append(item); });
}

const canvas = by("plane");
const pointed = (event) => {
  const box = canvas.getBoundingClientRect();
  set({ x: Math.floor((event.clientX - box.left) / box.width * nx),
    y: ny - 1 - Math.floor((event.clientY - box.top) / box.height * ny) });
};
canvas.addEventListener("pointerdown", (event) => { canvas.focus(); pointed(event); });
canvas.addEventListener("pointermove", (event) => { if (event.buttons) pointed(event); });
by("stack").addEventListener("pointerdown", (event) => {
  const group = event.target.closest("[data-z]");
  if (group) set({ z: +group.dataset.z });
});
const moves = { ArrowLeft: { x: -1 }, ArrowRight: { x: 1 }, ArrowUp: { y: 1 }, ArrowDown: { y: -1 }, PageUp: { z: 1 }, PageDown: { z: -1 } };
document.addEventListener("keydown", (event) => {
  if (event.ctrlKey || event.metaKey || event.altKey || event.target.tagName === "INPUT") return;
  const onStack = event.target.id === "stack" && moves[event.key] && moves[event.key].y;
  const move = onStack ? { z: moves[event.key].y } : moves[event.key];
  if (move) {
    if (!["plane", "stack"].includes(event.target.id)) return;
    const axis = Object.keys(move)[0];
    set({ [axis]: state[axis] + move[axis] });
  } else if (/^[1-9]$/.test(event.key) && +event.key <= facts.names.length) set({ species: +event.key - 1 });
  else if (event.key === "v" || event.key === "V") {
    const now = views.findIndex((one) => one[0] === state.view);
    set({ view: views[(now + 1) % views.length][0] });
  } else return;
  event.preventDefault();
});

by("notes").textContent = facts.notes;
radios("species", "species", facts.names.map((name, s) => [String(s), name]));
radios("view", "view", views);
by("species").addEventListener("change", (event) => set({ species: +event.target.value }));
by("view").addEventListener("change", (event) => set({ view: event.target.value }));
list("measured", facts.measured); list("done", facts.done); believe();
const contrast = facts.names.map((_, s) => {
  const part = values.subarray(s * volume, s * volume + plane);
  const mean = part.reduce((sum, v) => sum + v, 0) / plane;
  return Math.sqrt(part.reduce((sum, v) => sum + (v - mean) ** 2, 0) / plane) / (mean || 1)
    * Math.min(1, 2 * facts.believe[s].readable[0]);
});
const first = contrast.indexOf(Math.max(...contrast));
let best = first * volume;
for (let i = best; i < first * volume + plane; i++) if (values[i] > values[best]) best = i;
best -= first * volume;
set({ species: first, y: Math.floor(best / nx), x: best % nx });
})();
