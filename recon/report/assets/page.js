// The table of the chosen voxel, the tables of facts, and what the person does.
function drawTable() {
  const [, dy, dx] = facts.voxel_um;
  by("place").textContent = `voxel at x ${length(state.x * dx)} µm, y ${length(state.y * dy)} µm, `
    + `${length(facts.heights_um[state.z])} µm above the diamond`;
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
    if (truth) row.insertCell().textContent = digits(truth[index]);
    const verdict = row.insertCell();
    verdict.textContent = ["no error", "yes", "with care", "no", "no value"][label];
    if (label !== 1) verdict.className = "poor";
  });
  const chosen = at(state.species, state.z, state.y, state.x);
  by("why").textContent = `${facts.names[state.species]} here: ${facts.label_meaning[labels[chosen]]}.`;
  by("spoken").textContent = `${by("place").textContent}: ${facts.names[state.species]} `
    + `${pair(values[chosen], errors[chosen])} millimolar`;
}

function draw() { drawPlan(); drawSection(); drawTable(); drawSpectrum(); choose(); }
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
function cell(row, text, kind) {
  const one = document.createElement(kind || "td");
  one.textContent = text;
  row.append(one);
  return one;
}
function believe() {
  const table = document.createElement("table"), head = table.createTHead().insertRow();
  ["height above the diamond", ...facts.heights_um.map((z) => `${length(z)} µm`)]
    .forEach((text) => cell(head, text, "th"));
  facts.believe.forEach((one) => {
    const body = table.createTBody(), percent = (share) => `${Math.round(100 * share)} %`;
    const title = cell(body.insertRow(), one.name, "th");
    title.colSpan = nz + 1; title.scope = "rowgroup"; title.className = "group";
    const add = (text, shown) => { const row = body.insertRow(); cell(row, text); return shown.map((t) => cell(row, t)); };
    add("standard error (mM)", one.error_mM.map(digits));
    if (one.true_error_mM) {
      add("true error (mM)", one.true_error_mM.map(digits)).forEach((node, z) => {
        if (one.off[z]) { node.className = "off"; node.textContent = `▲ ${node.textContent}`; }
      });
      add("truth within 2 s.e.", one.inside.map(percent));
    }
    if (one.width_um) add("width of a point, x × y (µm)",
      one.width_um.map((w) => w.map((v) => v === null ? "–" : digits(v)).join(" × ")));
    add("readable voxels", one.readable.map(percent));
  });
  by("believe").append(table);
  [...facts.verdict, ...facts.remarks].forEach((text) => {
    const item = document.createElement("li");
    item.textContent = text;
    by("remarks").append(item);
  });
}

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
["", "amount ± s.e. (mM)", ...(truth ? ["truth (mM)"] : []), "readable"]
  .forEach((text) => cell(by("amounts").tHead.rows[0], text, "th"));
by("truth-key").hidden = !truth;
list("measured", facts.measured); list("done", facts.done); believe();
let waiting = 0;
addEventListener("resize", () => { cancelAnimationFrame(waiting); waiting = requestAnimationFrame(draw); });

matchMedia("print").addEventListener("change", draw);

// Begin where there is most to see: the species with the strongest contrast in the lowest plane.
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
