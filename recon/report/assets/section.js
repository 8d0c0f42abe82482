// The slice cut along x through the chosen voxel, lying on the diamond; x runs as in the plan above.
function drawSection() {
  const svg = by("stack"), width = Math.max(280, Math.round(svg.clientWidth || 500));
  const gutter = getComputedStyle(svg), left = parseFloat(gutter.getPropertyValue("--left"));
  const right = parseFloat(gutter.getPropertyValue("--right")), inner = width - left - right;
  const [dz, , dx] = facts.voxel_um, across = inner / (nx * dx);
  const row = Math.max(dz * across, Math.min(26, Math.max(300 / nz, 8))), down = row / dz;
  const gap = Math.min(40, (facts.heights_um[0] - dz / 2) * down), top = 18, face = top + nz * row + gap;
  const over = Math.min(30, facts.layer_um[0] * down), layer = Math.min(60, Math.max(3, facts.layer_um[1] * down));
  const height = face + over + layer + 34, rest = { fill: "#66707c" };
  cleared(svg, width, height);
  element("text", { x: 0, y: 12, ...rest }, svg, "z (µm)");
  element("text", { x: width, y: 12, "text-anchor": "end", ...rest }, svg, "± mM, r.m.s.");
  const cut = painted(nz, (line, x) => at(state.species, nz - 1 - line, state.y, x));
  element("image", { href: cut.toDataURL(), x: left, y: top, width: inner, height: nz * row,
    preserveAspectRatio: "none", class: "voxels" }, svg);
  const line = left + (state.x + 0.5) * dx * across;
  for (const [stroke, wide] of [["#000", 3], ["#fff", 1]])
    element("line", { x1: line, x2: line, y1: top, y2: top + nz * row, stroke, "stroke-width": wide, opacity: 0.7 }, svg);
  for (let z = 0; z < nz; z++) drawPlane(svg, z, top + (nz - 1 - z) * row, row, left, inner, across);
  const box = (y, high, fill) => element("rect", { x: left, y, width: inner, height: high, fill }, svg);
  if (gap > 0) box(face - gap, gap, "#f4f6f8");
  box(face, over + layer + 14, "#dfe5ec"); box(face + over, layer, "#c8577e");
  element("line", { x1: left, x2: left + inner, y1: face, y2: face, stroke: "#1d232b" }, svg);
  element("text", { x: left, y: height - 5, ...rest }, svg,
    `diamond; sensor layer ${length(facts.layer_um[0])} to ${length(facts.layer_um[0] + facts.layer_um[1])} µm below its face`);
  svg.setAttribute("aria-activedescendant", `plane-${state.z}`);
  const stretch = down / across;
  by("section-title").textContent = `section along x at y ${length(state.y * facts.voxel_um[1])} µm`
    + (Math.abs(stretch - 1) > 0.05 ? `, heights drawn ${stretch.toPrecision(2)} times too tall` : "")
    + (facts.believe[state.species].width_um ? "; white bars: width of a point along x" : "");
}

function drawPlane(svg, z, y, row, left, inner, across) {
  const believe = facts.believe[state.species], worst = Math.max(...believe.error_mM) || 1;
  const chosen = z === state.z, width = svg.viewBox.baseVal.width, room = width - left - inner - 8;
  const group = element("g", { role: "option", id: `plane-${z}`, "data-z": z, "aria-selected": chosen }, svg);
  const high = length(facts.heights_um[z]), error = digits(believe.error_mM[z]);
  element("title", {}, group, `${high} µm above the diamond: r.m.s. standard error ${error} mM, `
    + `${Math.round(100 * believe.readable[z])} % of voxels readable`);
  element("rect", { x: 0, y, width, height: row, fill: "#fff", opacity: 0 }, group);
  element("rect", { x: left, y: y + 0.5, width: inner, height: row - 1, fill: "none",
    stroke: chosen ? "#ff8c2b" : "#fff", "stroke-width": chosen ? 3 : 0.6 }, group);
  element("rect", { x: left + inner + 8, y: y + 1, width: room * believe.error_mM[z] / worst,
    height: Math.max(1, row - 2), fill: chosen ? "#f0a05f" : "#f6d2b5" }, group);
  const point = believe.width_um && believe.width_um[z][0];
  if (point) {
    const from = left + 6, to = from + point * across;
    for (const [stroke, wide] of [["#000", 5], ["#fff", 2.5]])
      element("line", { x1: from, x2: to, y1: y + row / 2, y2: y + row / 2, stroke, "stroke-width": wide }, group);
  }
  if (row < 11 && !chosen && z % Math.ceil(11 / row)) return;
  const weight = chosen ? 700 : 400, middle = y + row / 2 + 4;
  element("text", { x: left - 6, y: middle, "text-anchor": "end", "font-weight": weight }, group, high);
  element("text", { x: left + inner + 12, y: middle, "font-weight": weight }, group, `± ${error}`);
}

by("stack").addEventListener("pointerdown", (event) => {
  const group = event.target.closest("[data-z]");
  if (!group) return;
  const box = by("plane").getBoundingClientRect(), share = (event.clientX - box.left) / box.width;
  set({ z: +group.dataset.z, ...(share >= 0 && share < 1 ? { x: Math.floor(share * nx) } : {}) });
});
