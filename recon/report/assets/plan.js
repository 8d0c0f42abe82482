// The chosen plane from above, with its colour scale.
function drawPlan() {
  const canvas = by("plane"), zoom = Math.max(1, Math.ceil(512 / nx));
  canvas.width = nx * zoom; canvas.height = ny * zoom;
  canvas.style.aspectRatio = `${nx * facts.voxel_um[2]} / ${ny * facts.voxel_um[1]}`;
  const context = canvas.getContext("2d");
  context.imageSmoothingEnabled = false;
  const small = painted(ny, (row, x) => at(state.species, state.z, ny - 1 - row, x));
  context.drawImage(small, 0, 0, nx * zoom, ny * zoom);
  drawMark(context, zoom);
  drawScaleBar(context, zoom, canvas.height, canvas.width / (canvas.clientWidth || canvas.width));
  const title = views.find((one) => one[0] === state.view)[1];
  by("plane-title").textContent =
    `${facts.names[state.species]}, ${title}, ${length(facts.heights_um[state.z])} µm above the diamond`;
  canvas.setAttribute("aria-label", by("plane-title").textContent);
  drawBar();
}

function drawMark(context, zoom) {
  const x = (state.x + 0.5) * zoom, y = (ny - 0.5 - state.y) * zoom, reach = 1.6 * zoom + 2;
  for (const [style, width] of [["#000", 5], ["#fff", 2]]) {
    context.strokeStyle = style; context.lineWidth = width;
    context.strokeRect(x - reach / 2, y - reach / 2, reach, reach);
  }
}

function drawScaleBar(context, zoom, height, dense) {
  const wide = nx * facts.voxel_um[2], step = 10 ** Math.floor(Math.log10(wide / 4));
  const long = [5, 2, 1].map((n) => n * step).find((n) => n <= wide / 4) || step;
  const pixels = long / facts.voxel_um[2] * zoom, top = height - 8 * dense;
  context.fillStyle = "#000"; context.fillRect(8 * dense - 2, top - 2, pixels + 4, 4 * dense + 4);
  context.fillStyle = "#fff"; context.fillRect(8 * dense, top, pixels, 4 * dense);
  context.font = `600 ${Math.round(14 * dense)}px sans-serif`;
  context.lineWidth = 3 * dense; context.strokeStyle = "#000"; context.lineJoin = "round";
  context.strokeText(`${length(long)} µm`, 8 * dense, top - 5 * dense);
  context.fillText(`${length(long)} µm`, 8 * dense, top - 5 * dense);
}

function drawBar() {
  const bar = by("bar"), context = bar.getContext("2d"), scale = colours();
  scale.forEach((colour, i) => { context.fillStyle = `rgb(${colour})`; context.fillRect(0, 255 - i, 1, 1); });
  const [low, high] = limits[state.species][state.view];
  const all = Array.from({ length: volume }, (_, i) => value(state.view, state.species * volume + i));
  by("low").textContent = (all.some((v) => v < low) ? "≤ " : "") + digits(low);
  by("high").textContent = (all.some((v) => v > high) ? "≥ " : "") + digits(high);
}

const plan = by("plane");
const pointed = (event) => {
  const box = plan.getBoundingClientRect();
  set({ x: Math.floor((event.clientX - box.left) / box.width * nx),
    y: ny - 1 - Math.floor((event.clientY - box.top) / box.height * ny) });
};
plan.addEventListener("pointerdown", (event) => { plan.focus({ preventScroll: true }); pointed(event); });
plan.addEventListener("pointermove", (event) => { if (event.buttons) pointed(event); });
