// What was handed to the page, and how numbers are written.
const read = (id) => JSON.parse(document.getElementById(id).textContent);
const facts = read("facts"), packed = read("arrays");
const bytes = (text) => Uint8Array.from(atob(text), (letter) => letter.charCodeAt(0));
const floats = (name) => new Float32Array(bytes(packed[name]).buffer);
const [nz, ny, nx] = facts.shape, plane = ny * nx, volume = nz * plane, count = facts.ppm.length;
const values = floats("values"), errors = floats("errors");
const quantised = new Int16Array(bytes(packed.spectrum).buffer), quantum = floats("quantum");
const spread = floats("spread"), shapes = floats("shapes"), labels = bytes(packed.labels);
const truth = facts.truth ? floats("truth") : null;
const by = (id) => document.getElementById(id);
const views = [["amount", "amount"], ["error", "standard error"]]
  .concat(truth ? [["truth", "truth"], ["off", "amount − truth"]] : []);
const state = { species: 0, view: "amount", z: 0, y: ny >> 1, x: nx >> 1 };
const at = (species, z, y, x) => ((species * nz + z) * ny + y) * nx + x;

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
const niceStep = (wide, parts) => {
  const step = 10 ** Math.floor(Math.log10(wide / parts));
  return [1, 2, 5, 10].map((n) => n * step).find((one) => wide / one <= parts);
};

const SVG = "http://www.w3.org/2000/svg";
const element = (name, attributes, parent, text) => {
  const node = document.createElementNS(SVG, name);
  for (const key in attributes) node.setAttribute(key, attributes[key]);
  if (text !== undefined) node.textContent = text;
  parent.appendChild(node);
  return node;
};
const cleared = (svg, width, height) => {
  svg.replaceChildren();
  svg.setAttribute("viewBox", `0 0 ${width} ${height}`);
  return svg;
};

// One scale per species for amounts and truth, over all planes.
const highest = (array, species) => {
  const all = Float32Array.from(array.subarray(species * volume, (species + 1) * volume)).sort();
  return all[Math.floor(0.998 * (all.length - 1))] || all[all.length - 1] || 1;
};
const rounded = (top) => {
  const step = 10 ** Math.floor(Math.log10(top));
  return Math.ceil(top / step * 2) / 2 * step;
};
const limits = facts.names.map((_, s) => {
  const top = rounded(Math.max(highest(values, s), truth ? highest(truth, s) : 0));
  return { amount: [0, top], truth: [0, top], error: [0, rounded(highest(errors, s))], off: [-top / 2, top / 2] };
});
const value = (view, index) => view === "amount" ? values[index] : view === "error" ? errors[index]
  : view === "truth" ? truth[index] : values[index] - truth[index];
const colours = () => state.view === "off" ? facts.error_colours : facts.amount_colours;

// A small canvas of voxels as they are shown now: index(row from the top, column).
const painted = (rows, index) => {
  const small = document.createElement("canvas");
  small.width = nx; small.height = rows;
  const context = small.getContext("2d"), image = context.createImageData(nx, rows), scale = colours();
  const [low, high] = limits[state.species][state.view];
  for (let row = 0; row < rows; row++) for (let x = 0; x < nx; x++) {
    const share = (value(state.view, index(row, x)) - low) / (high - low), place = 4 * (row * nx + x);
    image.data.set(scale[Math.min(255, Math.max(0, Math.round(255 * share)))], place);
    image.data[place + 3] = 255;
  }
  context.putImageData(image, 0, 0);
  return small;
};
