// The chosen voxel's spectrum: cube with error band, amounts times known lines, truth.
const AMPERE = { 0: "A/m s", "-3": "mA/m s", "-6": "µA/m s", "-9": "nA/m s", "-12": "pA/m s" };

function voxelCurves(voxel) {
  const curves = { seen: [], fit: [], truth: [] };
  for (let f = 0; f < count; f++) {
    curves.seen.push(quantised[f * volume + voxel] * quantum[voxel]);
    let fit = 0, real = 0;
    for (let s = 0; s < facts.names.length; s++) {
      fit += values[s * volume + voxel] * shapes[s * count + f];
      if (truth) real += truth[s * volume + voxel] * shapes[s * count + f];
    }
    curves.fit.push(fit);
    if (truth) curves.truth.push(real);
  }
  return curves;
}

function drawSpectrum() {
  const svg = by("spectrum"), width = Math.min(680, Math.max(300, Math.round(svg.clientWidth || 560)));
  const height = Math.round(Math.min(320, Math.max(230, 0.5 * width)));
  const edge = { l: 50, r: 8, t: 44, b: 40 };
  cleared(svg, width, height);
  const voxel = (state.z * ny + state.y) * nx + state.x, curves = voxelCurves(voxel), band = spread[voxel];
  const all = curves.seen.concat(curves.fit, curves.truth);
  const high = Math.max(...all, 1e-12) + band, low = Math.min(...all, 0) - band;
  const power = Math.max(-12, Math.min(0, 3 * Math.floor(Math.log10(high) / 3))), unit = 10 ** power;
  const first = facts.ppm[0], last = facts.ppm[count - 1];
  const X = (ppm) => edge.l + (last - ppm) / (last - first) * (width - edge.l - edge.r);
  const Y = (v) => edge.t + (high - v) / (high - low) * (height - edge.t - edge.b);
  const points = (list) => list.map((v, f) => `${X(facts.ppm[f]).toFixed(1)},${Y(v).toFixed(1)}`);
  const curve = (list, stroke, wide, dash) => element("polyline", { points: points(list).join(" "),
    fill: "none", stroke, "stroke-width": wide, ...(dash ? { "stroke-dasharray": dash } : {}) }, svg);
  const rim = curves.seen.map((v) => v - band), crown = curves.seen.map((v) => v + band);
  element("polygon", { points: points(crown).concat(points(rim).reverse()).join(" "), fill: "#0072b2", opacity: 0.22 }, svg);
  drawAxes(svg, X, Y, { first, last, low: low / unit, high: high / unit, unit, width, height, edge });
  if (truth) curve(curves.truth, "#1d232b", 1.2);
  curve(curves.seen, "#0072b2", 2);
  curve(curves.fit, "#d55e00", 1.6, "6 3");
  element("text", { x: 0, y: 12, fill: "#66707c" }, svg, `spectrum (${AMPERE[power]})`);
  nameLines(svg, X, edge, height);
  svg.dataset.peak = Math.max(...curves.seen);
  by("band").textContent = `± ${digits(band / unit)} ${AMPERE[power]}`;
}

function drawAxes(svg, X, Y, span) {
  const { first, last, low, high, unit, width, height, edge } = span;
  const base = height - edge.b, step = niceStep(last - first, width / 70), rise = niceStep(high - low, 7);
  for (let i = Math.ceil(first / step); i * step <= last; i++) {
    element("line", { x1: X(i * step), x2: X(i * step), y1: base, y2: base + 5, stroke: "#66707c" }, svg);
    element("text", { x: X(i * step), y: base + 18, "text-anchor": "middle" }, svg, String(+(i * step).toFixed(3)));
  }
  for (let i = Math.ceil(low / rise); i * rise <= high; i++) {
    const y = Y(i * rise * unit);
    element("line", { x1: edge.l, x2: width - edge.r, y1: y, y2: y, stroke: i ? "#e6eaee" : "#9aa5b1" }, svg);
    element("text", { x: edge.l - 6, y: y + 4, "text-anchor": "end" }, svg, String(+(i * rise).toPrecision(3)));
  }
  element("text", { x: (width + edge.l) / 2, y: height - 4, "text-anchor": "middle", fill: "#66707c" }, svg, "chemical shift (ppm)");
}

function nameLines(svg, X, edge, height) {
  const rows = [-999, -999];
  facts.names.map((name, s) => [X(facts.lines_ppm[s]), name]).sort((a, b) => a[0] - b[0]).forEach(([x, name]) => {
    const half = 3.6 * name.length + 3, row = x - half > rows[0] || rows[0] < rows[1] ? 0 : 1;
    rows[row] = x + half;
    element("line", { x1: x, x2: x, y1: edge.t - 12 * row, y2: height - edge.b, stroke: "#9aa5b1", "stroke-dasharray": "2 3" }, svg);
    element("text", { x, y: edge.t - 4 - 12 * row, "text-anchor": "middle", fill: "#66707c" }, svg, name);
  });
}
